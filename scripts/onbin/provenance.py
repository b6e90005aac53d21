"""Where a number comes from: inputs by content, settings, versions."""

import hashlib
import json
from collections.abc import Iterable, Mapping
from importlib import metadata
from pathlib import Path
from typing import Any

from onbin import __version__, layout

LIBRARIES = (
    "mne", "mne-bids", "mne-icalabel", "numpy", "pandas", "python-picard", "scipy", "seaborn",
    "snakemake", "specparam",
)  # fmt: skip
BIDS_VERSION = "1.10.0"
# What BIDS has no names for yet (spectra, ICA and epochs of EEG derivatives are not settled), and
# the report.
IGNORED = (
    "*.fif", "*_eeg.json", "*_ica.*", "*_trials.*", "*_recording.*", "*_designs.*", "*_gains.*",
    "*_evidence.*", "*_sheet.*", "*_verdicts.*", "*_frequencies.*", "*_coefficients.*", "*_psd.*",
    "*_measures.*", "*_windows.*", "study", "report.*", "manifest.*",
)  # fmt: skip
CHUNK = 1 << 20


def sha256(path: str | Path) -> str:
    """SHA-256 of a file's content."""
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        while chunk := file.read(CHUNK):
            digest.update(chunk)
    return digest.hexdigest()


def content_hash(path: str | Path) -> str:
    """SHA-256 of a file; for a file of ours taken from its sidecar, where it was noted.

    What a dataset writes beside its recordings is not believed; they have no desc- in their names.
    """
    beside = Path(layout.sidecar(path))
    if "_desc-" in Path(path).name and beside != Path(path) and beside.is_file():
        try:
            noted = json.loads(beside.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            noted = {}
        provenance = noted.get("Provenance") if isinstance(noted, dict) else None
        if isinstance(provenance, dict) and "sha256" in provenance:
            return provenance["sha256"]
    return sha256(path)


def versions() -> dict[str, str]:
    """Versions of this package and of the libraries that numbers rest on."""
    return {"onbin": __version__} | {name: metadata.version(name) for name in LIBRARIES}


def make_sidecar(
    output: str | Path,
    step: str,
    inputs: Iterable[str | Path],
    settings: Mapping[str, Any],
    about: Mapping[str, Any],
) -> str:
    """Text of an output's sidecar.

    Parameters
    ----------
    output : path
        The finished file.
    step : str
    inputs : iterable of path
    settings : mapping
        The part of the settings that the step was given.
    about : mapping
        What else describes the output, such as the dictionary of a table's columns.
    """
    sidecar = {
        **about,
        "Provenance": {
            "step": step,
            "sha256": sha256(output),
            "inputs": {str(path): content_hash(path) for path in sorted(map(str, inputs))},
            "settings": settings,
            "versions": versions(),
        },
    }
    return json.dumps(sidecar, indent=2, ensure_ascii=False) + "\n"


def dataset_description(title: str, source: str) -> dict[str, Any]:
    """Return ``dataset_description.json`` of the results, a BIDS derivative."""
    return {
        "Name": f"{title}: results",
        "BIDSVersion": BIDS_VERSION,
        "DatasetType": "derivative",
        "GeneratedBy": [
            {"Name": "onbin", "Version": __version__, "Description": "Frequency-tagging workflow"}
        ],
        "SourceDatasets": [{"URL": source}],
    }


def results_readme(title: str) -> str:
    """README of the results."""
    return f"""{title}: results

Made by onbin {__version__} from the dataset named in dataset_description.json, which was only read.
report.html is for people; study/ has the tables and figures behind it; sub-* has every step of
every recording. Each file has a sidecar of the same name that ends in .json, with the inputs by
SHA-256, the settings used and the versions; in a table's sidecar every column is explained.
manifest.tsv lists all files. logs/ has what each step said, and its time and memory.

For research. This is no diagnosis and no medical device. EEG is personal health data: keep it and
what is made of it as your ethics board and the law of the place require.
"""


def manifest_row(path: Path, results: Path) -> dict[str, Any]:
    """One line of the manifest."""
    beside = Path(layout.sidecar(path))
    noted = {}
    if beside != path and beside.is_file():
        noted = json.loads(beside.read_text(encoding="utf-8"))["Provenance"]
    return {
        "file": path.relative_to(results).as_posix(),
        "step": noted.get("step", "describe"),
        "bytes": path.stat().st_size,
        "sha256": sha256(path),
        "inputs": " ".join(noted.get("inputs", ())) or None,
    }
