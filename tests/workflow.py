"""Run the whole workflow as a user does, in a copy of the repository."""

import shutil
import subprocess
import sys
from pathlib import Path

import yaml

ROOT = Path(__file__).parents[1]
DEMO = ROOT / "demo_bids"
DEMO_SETTINGS = ROOT / "config" / "config.yaml"


def copy_workflow(folder: Path) -> Path:
    """Copy what makes the workflow, so that a test may change it."""
    folder.mkdir(parents=True, exist_ok=True)
    for name in ("rules", "scripts", "config"):
        ignored = shutil.ignore_patterns("__pycache__")
        shutil.copytree(ROOT / name, folder / name, ignore=ignored)
    shutil.copy(ROOT / "Snakefile", folder / "Snakefile")
    return folder


def write_settings(path: Path, settings: dict) -> Path:
    """Write a settings file."""
    path.write_text(yaml.safe_dump(settings, sort_keys=False, allow_unicode=True))
    return path


def demo_settings(**changes) -> dict:
    """The demo's settings, with the dataset in its place; ``changes`` replace whole parts."""
    settings = yaml.safe_load(DEMO_SETTINGS.read_text())
    settings["dataset"]["folder"] = str(DEMO)
    return settings | changes


def snakemake(folder: Path, settings: Path, *arguments: str) -> subprocess.CompletedProcess:
    """Run Snakemake with the profile for one machine."""
    command = [
        sys.executable, "-m", "snakemake", "--configfile", str(settings),
        "--workflow-profile", "config/profiles/local", *arguments,
    ]  # fmt: skip
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)


def planned_jobs(folder: Path, settings: Path) -> dict[str, int]:
    """Jobs that a run would do, by step, without ``all`` and ``total``."""
    done = snakemake(folder, settings, "-n", "--quiet", "rules")
    assert done.returncode == 0, done.stdout + done.stderr
    jobs = {}
    for line in (done.stdout + done.stderr).splitlines():
        words = line.split()
        if len(words) == 2 and words[1].isdigit() and words[0] not in ("all", "total"):
            jobs[words[0]] = int(words[1])
    return jobs
