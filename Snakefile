# A regional flood-frequency study, from an agency's tables to flood estimates on a map.
#
#   snakemake                                    the example region
#   snakemake --configfile FOLDER/study.yaml     your study; all its files lie in FOLDER
#
# As a module of another workflow: `config: {"study_file": "FOLDER/study.yaml"}` and `prefix: "FOLDER"`.
#
# Stages are called through the shell; the science is in src/wrackline.
import sys
from pathlib import Path

from snakemake.utils import min_version

HERE = Path(workflow.current_basedir.get_path_or_uri(secret_free=True))
sys.path.insert(0, str(HERE / "workflow"))
from study_folder import (
    find_study,
    forget_damaged,
    lock_study,
    named_study,
    read_study,
    require_previous,
)
from telling import hush, tell_failure, tell_results
from wiring import (
    FAILED,
    STAGES,
    prepare_shell,
    settings,
    source_digest,
    stage_caller,
    stages_of,
)

min_version("9.20")

AS_MODULE = not workflow.modifier.is_main_snakefile()
if AS_MODULE:
    STUDY = named_study(config)
else:
    STUDY = find_study(workflow, default=HERE / "example_region" / "study.yaml")
CONFIG = read_study(STUDY)
require_previous(STUDY, CONFIG)
RESULTS = CONFIG.output.replace("{", "{{").replace("}", "}}")
RUN_STAGES = stages_of(CONFIG)

if workflow.is_main_process:
    if not AS_MODULE:
        hush(workflow.dryrun, STUDY.parent / CONFIG.output)
    lock_study(STUDY.parent)
    if not workflow.dryrun:
        forget_damaged(STUDY.parent, RUN_STAGES, CONFIG.output)
        (STUDY.parent / FAILED).unlink(missing_ok=True)
prepare_shell()
stage_call = stage_caller(config["study_file"] if AS_MODULE else STUDY.name)

if not AS_MODULE:

    workdir: STUDY.parent

    localrules:
        all,


rule all:
    default_target: True
    input:
        page=f"{RESULTS}/report.html",
        manifest=f"{RESULTS}/manifest.json",


include: "workflow/rules/common.smk"
include: "workflow/rules/intake.smk"
include: "workflow/rules/screen.smk"
include: "workflow/rules/dependence.smk"
include: "workflow/rules/atsite.smk"
include: "workflow/rules/skew.smk"
include: "workflow/rules/weight.smk"
include: "workflow/rules/pool.smk"
include: "workflow/rules/regress.smk"
include: "workflow/rules/validate.smk"
include: "workflow/rules/estimate.smk"
include: "workflow/rules/publish.smk"


if CONFIG.editions.previous:

    include: "workflow/rules/compare.smk"


onsuccess:
    tell_results(STUDY.parent / CONFIG.output)


onerror:
    tell_failure(STUDY.parent)
