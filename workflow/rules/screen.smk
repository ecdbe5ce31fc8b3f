# Every record is tested; what is used, and why, is settled here.
checkpoint screen:
    input:
        records=after_intake("records.csv"),
        gauges=after_intake("gauges.csv"),
        basins=after_intake("basins.csv"),
        accounting=after_intake("accounting.csv"),
        ledger=after_intake("ledger.csv"),
        periods=after_intake("periods.csv"),
        redundancy=after_intake("redundancy.csv"),
    output:
        contribution="work/screen/contribution.json",
        gauges="work/screen/gauges.csv",
        records="work/screen/records.csv",
        accounting="work/screen/accounting.csv",
        redundant_pairs="work/screen/redundant_pairs.csv",
    log:
        "work/logs/screen.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "screening", "units", "inputs"),
        sources=source_digest("screen"),
    shell:
        stage_call("screen")
