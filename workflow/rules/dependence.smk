# How floods at two gauges go together, as a function of distance.
rule dependence:
    input:
        records=after_screen("records.csv"),
        used=after_screen("gauges.csv"),
        gauges=after_intake("gauges.csv"),
    output:
        contribution="work/dependence/contribution.json",
        model="work/dependence/model.json",
    log:
        "work/logs/dependence.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "dependence"),
        sources=source_digest("dependence"),
    shell:
        stage_call("dependence")
