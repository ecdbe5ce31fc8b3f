# Floods at gauges: every record fitted by itself, and what to check about the fit.
rule atsite:
    input:
        records=after_intake("records.csv"),
        gauges=after_intake("gauges.csv"),
        ledger=after_intake("ledger.csv"),
        used=after_screen("gauges.csv"),
    output:
        contribution="work/atsite/contribution.json",
        moments="work/atsite/moments.csv",
        gauge_moments="work/atsite/gauge_moments.csv",
        gauge_estimates="work/atsite/gauge_estimates.csv",
    log:
        "work/logs/atsite.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "at_site", "aeps", "confidence", "units", "seed"),
        sources=source_digest("atsite"),
    shell:
        stage_call("atsite")
