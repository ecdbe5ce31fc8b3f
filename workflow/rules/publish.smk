# Tables, maps, page and manifest: the only stage that writes results. Earlier results stay as they are
# until the new ones are whole, hence `update`.
rule publish:
    input:
        contributions=expand("work/{stage}/contribution.json", stage=RUN_STAGES[:-1]),
        gauges=after_intake("gauges.csv"),
        targets=after_intake("targets.csv"),
        basins=after_intake("basins.csv"),
        regions=after_intake("regions.csv"),
        records=after_screen("records.csv"),
        skew_map="work/skew/skew.tif",
        skew_cells="work/skew/skew_cells.csv",
        skew_contours="work/skew/skew_contours.csv",
        study=STUDY.name.replace("{", "{{").replace("}", "}}"),
    output:
        page=update(f"{RESULTS}/report.html"),
        manifest=update(f"{RESULTS}/manifest.json"),
        columns=update(f"{RESULTS}/tables/columns.csv"),
        map=update(f"{RESULTS}/maps/study.gpkg"),
        skew_map=update(f"{RESULTS}/maps/skew.tif"),
    log:
        "work/logs/publish.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, *type(CONFIG).model_fields),
        sources=source_digest("publish"),
    shell:
        stage_call("publish")
