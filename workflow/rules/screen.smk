# Every record is tested; what is used, and why, is settled here.
rule screen:
    input:
        records="work/intake/records.csv",
        gauges="work/intake/gauges.csv",
        basins="work/intake/basins.csv",
        accounting="work/intake/accounting.csv",
        ledger="work/intake/ledger.csv",
        periods="work/intake/periods.csv",
        redundancy="work/intake/redundancy.csv",
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
