#!/usr/bin/env python3
"""Two commands that need nothing but Python: the example study, and the tests.

    python3 workflow/start.py run [--study FOLDER/study.yaml] [--cores N]
    python3 workflow/start.py test [arguments for pytest]

The first call sets up an environment in `.venv`, with the exact versions of `workflow/envs/constraints.txt`.
"""

import argparse
import hashlib
import importlib.util
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
ENVIRONMENT = ROOT / ".venv"
MARK = ENVIRONMENT / "complete"
CONSTRAINTS = ROOT / "workflow" / "envs" / "constraints.txt"
EXAMPLE = ROOT / "example_region" / "study.yaml"
OLDEST_PYTHON = (3, 11)
CHECKS = (
    ("style", ["ruff", "check", "."]),
    ("layout", ["ruff", "format", "--check", "."]),
    ("types", ["mypy"]),
    ("layers", ["lint-imports"]),
    ("layout of rules", ["snakefmt", "--check", "workflow"]),
    ("rules", ["snakemake", "--lint"]),
)


def main() -> int:
    refuse_old_python()
    arguments = read_arguments()
    started = time.monotonic()
    set_up()
    if arguments.command == "run":
        return run_study(arguments.study.resolve(), arguments.cores)
    status = run_tests(arguments.pytest)
    say(
        f"{'All well' if status == 0 else 'Something failed, see above'} ({time.monotonic() - started:.0f} s)."
    )
    return status


def read_arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="start.py", description="Run the example study (or yours), or the tests; sets itself up first."
    )
    commands = parser.add_subparsers(dest="command", required=True)
    run = commands.add_parser("run", help="run a study: the example region, or --study FOLDER/study.yaml")
    run.add_argument(
        "--study", type=Path, default=EXAMPLE, help="the study file (default: the example region's)"
    )
    run.add_argument(
        "--cores", type=int, default=os.cpu_count() or 1, help="processor cores to use (default: all)"
    )
    test = commands.add_parser(
        "test", help="run all checks and tests, or pytest alone with the arguments given"
    )
    test.add_argument("pytest", nargs=argparse.REMAINDER, help="arguments for pytest, such as -k pool")
    # argparse would take a leading option of pytest's, such as -k, for one of its own.
    if sys.argv[1:2] == ["test"] and sys.argv[2:] not in (["-h"], ["--help"]):
        return argparse.Namespace(command="test", pytest=sys.argv[2:])
    return parser.parse_args()


def refuse_old_python() -> None:
    if sys.version_info < OLDEST_PYTHON:
        wanted = ".".join(map(str, OLDEST_PYTHON))
        sys.exit(f"Python {wanted} or newer is needed; this is {sys.version.split()[0]} ({sys.executable}).")


def set_up() -> None:
    """Make the environment unless it is there and whole; the mark is written last, so a broken-off set-up is redone."""
    with only_one_set_up():
        wanted = environment_digest()
        if MARK.is_file() and MARK.read_text(encoding="utf-8") == wanted:
            return
        started = time.monotonic()
        same_python = MARK.is_file() and MARK.read_text(encoding="utf-8").split()[0] == wanted.split()[0]
        MARK.unlink(missing_ok=True)
        if not same_python:
            make_environment()
        say("Installing the packages that the study needs (about a minute, once) ...")
        install_packages()
        MARK.write_text(wanted, encoding="utf-8")
        say(f"Set up in {time.monotonic() - started:.0f} s: {ENVIRONMENT}")


def only_one_set_up():
    """Let a second call wait for the first; the operating system frees the lock however a process ends."""
    handle = os.fdopen(os.open(ROOT / "pyproject.toml", os.O_RDONLY))
    try:
        import fcntl

        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            say("Another set-up is at work here; waiting for it ...")
            fcntl.flock(handle, fcntl.LOCK_EX)
    except ImportError:
        pass
    return handle


def environment_digest() -> str:
    """What the environment depends on: this Python and this place, then the packages asked for."""
    place = hashlib.sha256(f"{sys.version} {sys.executable} {ENVIRONMENT}".encode()).hexdigest()[:16]
    packages = hashlib.sha256((ROOT / "pyproject.toml").read_bytes() + CONSTRAINTS.read_bytes()).hexdigest()[
        :16
    ]
    return f"{place} {packages}\n"


def make_environment() -> None:
    missing = [module for module in ("venv", "ensurepip") if importlib.util.find_spec(module) is None]
    if missing:
        version = f"{sys.version_info.major}.{sys.version_info.minor}"
        sys.exit(
            f"This Python ({sys.executable}) came without {' and '.join(missing)}, which set up environments.\n"
            f"On Debian and Ubuntu: apt-get install python{version}-venv (or python3-venv), then start again."
        )
    say(f"Setting up an environment for Python {sys.version.split()[0]} in {ENVIRONMENT} ...")
    shutil.rmtree(ENVIRONMENT, ignore_errors=True)
    made = subprocess.run([sys.executable, "-m", "venv", str(ENVIRONMENT)], capture_output=True, text=True)
    if made.returncode != 0:
        sys.exit(f"The environment could not be made:\n{made.stdout}{made.stderr}")


def install_packages() -> None:
    """Install with the machine's own pip settings; tell how far it is; keep pip's words in a log."""
    log = ENVIRONMENT / "set-up.log"
    expected = sum(1 for line in CONSTRAINTS.read_text(encoding="utf-8").splitlines() if "==" in line)
    command = [str(tool("python")), "-m", "pip", "install", "--progress-bar", "off", "--no-input"]
    command += ["-c", str(CONSTRAINTS), "-e", f"{ROOT}[workflow,test,lint]"]
    found = 0
    with log.open("w", encoding="utf-8") as record:
        pip = subprocess.Popen(
            command,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            errors="replace",
            env=clean_environment(),
        )
        for line in pip.stdout or ():
            record.write(line)
            if line.startswith("Collecting "):
                found += 1
                if found % 20 == 0:
                    say(f"  {found} of about {expected} packages found")
            elif line.startswith("Installing collected packages"):
                say("  all found; unpacking")
    if pip.wait() != 0:
        tail = "".join(log.read_text(encoding="utf-8").splitlines(keepends=True)[-20:])
        sys.exit(f"{tail}\nThe packages could not be installed; all that pip said: {log}")


def run_study(study: Path, cores: int) -> int:
    """Run the workflow, which tells how far it is and where the results lie."""
    say(f"Study {study}")
    command = [str(tool("python")), "-m", "snakemake", "--cores", str(cores)]
    if study != EXAMPLE:
        command += ["--configfile", str(study)]
    return call(command)


def run_tests(pytest_arguments: list) -> int:
    """Run all checks, then all tests; with arguments, pytest alone."""
    failed = []
    if not pytest_arguments:
        for number, (what, command) in enumerate(CHECKS, 1):
            say(f"Check {number} of {len(CHECKS)}: {what} ({' '.join(command)})")
            if call([str(tool(command[0])), *command[1:]]) != 0:
                failed.append(what)
        pytest_arguments = [
            "-n",
            str(min(os.cpu_count() or 1, 4)),
            "--dist",
            "loadfile",
            "-q",
            "--durations=10",
        ]
    if failed:
        say(f"Failed so far: {', '.join(failed)}")
    say(f"Tests (pytest {' '.join(pytest_arguments)})")
    status = call([str(tool("python")), "-m", "pytest", *pytest_arguments])
    return status or (1 if failed else 0)


def call(command: list) -> int:
    """Run a command in the repository with the environment's own tools first."""
    try:
        return subprocess.run(command, cwd=ROOT, env=clean_environment()).returncode
    except KeyboardInterrupt:
        return 130


def tool(name: str) -> Path:
    return ENVIRONMENT / ("Scripts" if os.name == "nt" else "bin") / name


def clean_environment() -> dict:
    """The caller's environment with our tools first; caches of fonts and the like stay in the repository."""
    environment = {
        name: value for name, value in os.environ.items() if name not in ("PYTHONPATH", "PYTHONHOME")
    }
    environment["PATH"] = os.pathsep.join([str(tool("python").parent), os.environ.get("PATH", os.defpath)])
    environment["VIRTUAL_ENV"] = str(ENVIRONMENT)
    environment["MPLCONFIGDIR"] = str(ENVIRONMENT / "cache" / "matplotlib")
    environment.setdefault("XDG_CACHE_HOME", str(ENVIRONMENT / "cache"))
    environment["OPENBLAS_NUM_THREADS"] = "1"
    return environment


def say(text: str) -> None:
    print(text, file=sys.stderr, flush=True)


if __name__ == "__main__":
    sys.exit(main())
