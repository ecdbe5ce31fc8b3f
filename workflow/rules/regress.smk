# The index flood as a function of catchment attributes.
rule regress:
    input:
        records="work/screen/records.csv",
        used="work/screen/gauges.csv",
        gauges="work/intake/gauges.csv",
        dependence="work/dependence/model.json",
        growth="work/pool/growth.json",
    output:
        contribution="work/regress/contribution.json",
        equations="work/regress/tables/equations.json",
    log:
        "work/logs/regress.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "index_flood", "attributes", "units", "confidence"),
        sources=source_digest("regress"),
    shell:
        stage_call("regress")
