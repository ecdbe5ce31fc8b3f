# Every gauge estimated as if it were ungauged: which route is trusted, and whether intervals hold what they promise.
rule validate:
    input:
        records="work/screen/records.csv",
        used="work/screen/gauges.csv",
        gauges="work/intake/gauges.csv",
        dependence="work/dependence/model.json",
        growth="work/pool/growth.json",
        equations="work/regress/tables/equations.json",
        left_out="work/regress/left_out.csv",
    output:
        contribution="work/validate/contribution.json",
        routes="work/validate/routes.json",
        left_out="work/validate/regional_left_out.csv",
    log:
        "work/logs/validate.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(
            CONFIG, "aeps", "regression", "index_flood", "units", "confidence"
        ),
        sources=source_digest("validate"),
    shell:
        stage_call("validate")
