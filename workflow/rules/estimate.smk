# Floods at the ungauged sites.
rule estimate:
    input:
        targets="work/intake/targets.csv",
        growth="work/pool/growth.json",
        equations="work/regress/tables/equations.json",
    output:
        contribution="work/estimate/contribution.json",
    log:
        "work/logs/estimate.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "aeps", "units", "confidence"),
        sources=source_digest("estimate"),
    shell:
        stage_call("estimate")
