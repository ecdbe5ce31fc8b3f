# Tables, maps, page and manifest: the only stage that writes results. Earlier results stay as they are
# until the new ones are whole, hence `update`.
report: "../report/study.rst"


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
        page=report(
            update(f"{RESULTS}/report.html"),
            caption="../report/page.rst",
            category="Study page",
            labels={"result": "Study page"},
        ),
        manifest=report(
            update(f"{RESULTS}/manifest.json"),
            caption="../report/manifest.rst",
            category="Provenance",
            labels={"result": "Manifest"},
        ),
        columns=report(
            update(f"{RESULTS}/tables/columns.csv"),
            caption="../report/columns.rst",
            category="Tables",
            labels={"result": "Dictionary of columns"},
        ),
        map=report(
            update(f"{RESULTS}/maps/study.gpkg"),
            caption="../report/map.rst",
            category="Maps",
            labels={"result": "Map layers"},
        ),
        skew_map=report(
            update(f"{RESULTS}/maps/skew.tif"),
            caption="../report/skew_map.rst",
            category="Maps",
            labels={"result": "Generalized skew"},
        ),
    log:
        "work/logs/publish.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, *type(CONFIG).model_fields),
        sources=source_digest("publish"),
    shell:
        stage_call("publish")
