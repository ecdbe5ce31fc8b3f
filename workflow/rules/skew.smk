# The generalized skew of the region: which gauges shape it, which model, its errors and its map.
rule skew:
    input:
        moments="work/atsite/moments.csv",
        records=after_intake("records.csv"),
        gauges=after_intake("gauges.csv"),
        targets=after_intake("targets.csv"),
        basins=after_intake("basins.csv"),
        regions=after_intake("regions.csv"),
        used=after_screen("gauges.csv"),
        dependence="work/dependence/model.json",
        given=[CONFIG.skew.given_map] if CONFIG.skew.source == "map" else [],
    output:
        contribution="work/skew/contribution.json",
        sites="work/skew/sites.csv",
        model="work/skew/model.json",
        errors="work/skew/error_covariance.npy",
        map="work/skew/skew.tif",
        cells="work/skew/skew_cells.csv",
        contours="work/skew/skew_contours.csv",
    log:
        "work/logs/skew.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(CONFIG, "skew", "attributes", "pooling", "inputs", "units"),
        sources=source_digest("skew"),
    shell:
        stage_call("skew")
