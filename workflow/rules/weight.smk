# Floods at gauges, the station skew weighted by the generalized skew.
rule weight:
    input:
        moments="work/atsite/moments.csv",
        gauge_moments="work/atsite/gauge_moments.csv",
        gauge_estimates="work/atsite/gauge_estimates.csv",
        records=after_intake("records.csv"),
        used=after_screen("gauges.csv"),
        skew="work/skew/sites.csv",
    output:
        contribution="work/weight/contribution.json",
        moments="work/weight/moments.csv",
    log:
        "work/logs/weight.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "skew", "at_site", "aeps", "confidence", "units"),
        sources=source_digest("weight"),
    shell:
        stage_call("weight")
