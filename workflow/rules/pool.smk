# Pools of gauges, their tests, and a growth curve for each.
rule pool:
    input:
        records="work/screen/records.csv",
        used="work/screen/gauges.csv",
        gauges="work/intake/gauges.csv",
        dependence="work/dependence/model.json",
    output:
        contribution="work/pool/contribution.json",
        growth="work/pool/growth.json",
    log:
        "work/logs/pool.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(
            CONFIG, "pooling", "index_flood", "aeps", "confidence", "seed"
        ),
        sources=source_digest("pool"),
    shell:
        stage_call("pool")
