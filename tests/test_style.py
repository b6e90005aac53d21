"""The code is formatted, linted, and Snakemake finds nothing to object to."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


def run(*command):
    done = subprocess.run(
        [sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True, check=False
    )
    return done.returncode, done.stdout + done.stderr


@pytest.mark.parametrize(
    "command",
    [
        ("ruff", "check", "."),
        ("ruff", "format", "--check", "."),
        ("snakefmt", "--check", "Snakefile", "rules"),
    ],
    ids=lambda command: " ".join(command[:2]),
)
def test_style(command):
    code, output = run(*command)
    assert code == 0, output


def test_snakemake_lint():
    _, output = run("snakemake", "--lint")
    # The README says how the environment is made; a container or conda is not wanted.
    objections = [line for line in output.splitlines() if line.strip().startswith("*")]
    assert [o for o in objections if "conda environment or container" not in o] == [], output


def test_rules_and_snakefile_import_nothing_heavy():
    heavy = ("mne", "scipy", "pandas", "matplotlib", "seaborn")
    check = (
        "import sys; sys.path.insert(0, 'scripts');"
        "import onbin.layout, onbin.settings, onbin.fingerprint, onbin.summary;"
        f"print([name for name in {heavy} if name in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", check], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
