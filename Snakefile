# A regional flood-frequency study, from an agency's tables to flood estimates on a map.
#
#   snakemake                                    the example region
#   snakemake --configfile FOLDER/study.yaml     your study; all its files lie in FOLDER
#
# Stages are called through the shell; the science is in src/wrackline.
import sys
from pathlib import Path

from snakemake.utils import min_version

sys.path.insert(0, str(Path(workflow.basedir) / "workflow"))
from study_folder import find_study, forget_damaged, lock_study, read_study
from telling import hush, tell_failure, tell_results
from wiring import FAILED, STAGES, prepare_shell, settings, source_digest, stage_call

min_version("9.20")

STUDY = find_study(
    workflow, default=Path(workflow.basedir) / "example_region" / "study.yaml"
)
CONFIG = read_study(STUDY)
RESULTS = CONFIG.output.replace("{", "{{").replace("}", "}}")

if workflow.is_main_process:
    hush(workflow.dryrun, STUDY.parent / CONFIG.output)
    lock_study(STUDY.parent)
    if not workflow.dryrun:
        forget_damaged(STUDY.parent, STAGES, CONFIG.output)
        (STUDY.parent / FAILED).unlink(missing_ok=True)
prepare_shell(STUDY)


workdir: STUDY.parent


localrules:
    all,


rule all:
    default_target: True
    input:
        page=f"{RESULTS}/report.html",
        manifest=f"{RESULTS}/manifest.json",


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


onsuccess:
    tell_results(STUDY.parent / CONFIG.output)


onerror:
    tell_failure(STUDY.parent)
