# `intake` and `screen` are checkpoints: where one of their tables comes out as it was, what takes that table is
# not run again.


def after_intake(table):
    def wait(wildcards):
        checkpoints.intake.get()
        return f"work/intake/{table}"

    return wait


def after_screen(table):
    def wait(wildcards):
        checkpoints.screen.get()
        return f"work/screen/{table}"

    return wait


def input_files(wildcards):
    """Files of the study that are there; intake tells which are missing."""
    return [
        name
        for name in CONFIG.inputs.model_dump().values()
        if name and (STUDY.parent / name).is_file()
    ]
