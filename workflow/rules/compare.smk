# What moved since the previous edition, and why; only where the study names one.
rule compare:
    input:
        contributions=expand("work/{stage}/contribution.json", stage=STAGES[1:-1]),
        records=after_intake("records.csv"),
        used=after_screen("gauges.csv"),
        previous=f"{CONFIG.editions.folder}/{CONFIG.editions.previous}/edition.json",
        inputs=input_files,
    output:
        contribution="work/compare/contribution.json",
    log:
        "work/logs/compare.log",
    conda:
        "../envs/python.yaml"
    params:
        settings=settings(
            CONFIG,
            "study.edition",
            *(part for part in type(CONFIG).model_fields if part != "study"),
        ),
        sources=source_digest("compare"),
    shell:
        stage_call("compare")
