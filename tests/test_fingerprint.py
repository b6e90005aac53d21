"""A change reruns what it touches: fingerprints of scripts and what they import."""

import os
import subprocess
import sys
from pathlib import Path

import pytest
from onbin import fingerprint

SCRIPTS = Path(__file__).parents[1] / "scripts"


@pytest.fixture
def scripts(tmp_path):
    """A script that imports one module, which imports another; and one that nobody imports."""
    (tmp_path / "onbin" / "templates").mkdir(parents=True)
    files = {
        "step.py": "from onbin import first\nfirst.work()\n",
        "onbin/__init__.py": "",
        "onbin/first.py": 'from onbin.second import deep\n\n\ndef work():\n    """Work."""\n',
        "onbin/second.py": "def deep():\n    return 1\n",
        "onbin/apart.py": "x = 1\n",
        "page.py": "from onbin import paged\n",
        "onbin/paged.py": 'NAME = "page.html"\n',
        "onbin/templates/page.html": "<p>",
    }
    for name, text in files.items():
        (tmp_path / name).write_text(text)
    return tmp_path


def print_of(scripts, name="step.py"):
    fingerprint._tree.cache_clear()
    fingerprint._imports.cache_clear()
    return fingerprint.fingerprint(scripts / name)


@pytest.mark.parametrize(
    ("file", "text", "changes"),
    [
        ("onbin/second.py", "def deep():\n    return 2\n", True),
        ("step.py", "from onbin import first\nfirst.work(1)\n", True),
        ("onbin/apart.py", "x = 2\n", False),
        ("onbin/second.py", "# said anew\ndef deep():\n    return 1\n", False),
        ("onbin/first.py", 'from onbin.second import deep\ndef work():\n  """Do."""\n', False),
    ],
)
def test_what_changes_a_fingerprint(scripts, file, text, changes):
    before = print_of(scripts)
    (scripts / file).write_text(text)
    assert (print_of(scripts) != before) is changes


def test_another_process_finds_the_same():
    # sets come in another order in each process; a script and a module may share their name
    command = (
        "from onbin.fingerprint import fingerprint;"
        "print([fingerprint(f'{step}.py') for step in ('sensors', 'components', 'report')])"
    )
    found = {
        subprocess.run(
            [sys.executable, "-c", command],
            cwd=SCRIPTS,
            env={**os.environ, "PYTHONHASHSEED": str(seed)},
            capture_output=True,
            text=True,
            check=True,
        ).stdout
        for seed in range(6)
    }
    assert len(found) == 1


def test_a_template_counts(scripts):
    before = print_of(scripts, "page.py")
    (scripts / "onbin/templates/page.html").write_text("<div>")
    assert print_of(scripts, "page.py") != before


@pytest.mark.parametrize(
    ("step", "within", "without"),
    [
        ("filter", {"filtering", "tagging", "dataset"}, {"alpha", "response", "components"}),
        ("alpha", {"alpha", "alpha_tables", "sites"}, {"response", "filtering", "relation"}),
        ("response", {"response", "response_tables", "inference"}, {"alpha", "filtering"}),
        ("relation", {"relation", "inference"}, {"alpha", "spectra"}),
        ("spectra", {"spectra", "flicker_tables"}, {"response", "alpha", "components"}),
        ("intake", {"dataset", "filtering", "layout"}, {"alpha", "response", "inference"}),
    ],
)
def test_steps_rest_on_the_modules_they_use_and_no_others(step, within, without):
    modules = {path.stem for path in fingerprint.closure(SCRIPTS / f"{step}.py")}
    assert within | {"runner", step} <= modules
    assert not without & modules
