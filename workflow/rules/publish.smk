# Tables, maps, page and manifest: the only stage that writes results.
rule publish:
    input:
        contributions=expand("work/{stage}/contribution.json", stage=STAGES[:-1]),
        study=STUDY.name.replace("{", "{{").replace("}", "}}"),
    output:
        page=f"{RESULTS}/report.html",
        manifest=f"{RESULTS}/manifest.json",
        columns=f"{RESULTS}/tables/columns.csv",
        map=f"{RESULTS}/maps/study.gpkg",
    log:
        "work/logs/publish.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "study", "units", "output"),
        sources=source_digest("publish"),
    shell:
        stage_call("publish")
