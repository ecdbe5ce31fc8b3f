# The study's files become checked records, sites and polygons; faults end the run here.
rule intake:
    input:
        lambda wildcards: [
            name
            for name in CONFIG.inputs.model_dump().values()
            if name and (STUDY.parent / name).is_file()
        ],
    output:
        contribution="work/intake/contribution.json",
        records="work/intake/records.csv",
        gauges="work/intake/gauges.csv",
        targets="work/intake/targets.csv",
        basins="work/intake/basins.csv",
        regions="work/intake/regions.csv",
        accounting="work/intake/accounting.csv",
        ledger="work/intake/ledger.csv",
        periods="work/intake/periods.csv",
        redundancy="work/intake/redundancy.csv",
    log:
        "work/logs/intake.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(
            CONFIG,
            "inputs",
            "units",
            "water_year_starts",
            "attributes",
            "flags",
            "pooling",
            "index_flood",
        ),
        sources=source_digest("intake"),
    shell:
        stage_call("intake")
