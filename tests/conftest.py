"""The demo study, run once for all tests that look at its results."""

import hashlib
import os
from dataclasses import dataclass
from pathlib import Path

os.environ.setdefault("OMP_NUM_THREADS", "1")  # as the workflow does; two threads only wait

import pytest
from onbin import tables
from workflow import DEMO, copy_workflow, demo_settings, snakemake, write_settings


@dataclass(frozen=True)
class Finished:
    """A study that was run."""

    folder: Path
    settings: Path
    output: str
    exit_code: int

    @property
    def results(self) -> Path:
        return self.folder / "results"

    def table(self, name: str) -> list[dict]:
        return tables.read_table(self.results / "study" / f"{name}.tsv")


def digests(folder: Path) -> dict[str, str]:
    """SHA-256 of every file below a folder."""
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def run_study(folder: Path, settings: dict, *arguments: str) -> Finished:
    """Run a study from its settings in a fresh copy of the workflow."""
    copy_workflow(folder)
    path = write_settings(folder / "study.yaml", settings)
    done = snakemake(folder, path, *arguments)
    return Finished(folder, path, done.stdout + done.stderr, done.returncode)


@pytest.fixture(scope="session")
def demo(tmp_path_factory) -> Finished:
    """The demo study as a newcomer runs it; the dataset must come out unchanged."""
    before = digests(DEMO)
    finished = run_study(tmp_path_factory.mktemp("demo"), demo_settings())
    assert digests(DEMO) == before, "the run changed its dataset"
    return finished
