"""What stands where: the recordings of a dataset, and every file of the results.

Job graphs are built from this module, so it imports nothing heavy and reads folder listings only.
"""

import os
import re
from collections import defaultdict
from collections.abc import Collection, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

from onbin.errors import DataError, SettingsError

LOGS = "logs"
RECORD_ENDING = ".unfinished.json"
RUN_RECORD = f"{LOGS}/run.json"  # of the run of the whole that holds the results
EEG_FORMATS = (".vhdr", ".edf", ".bdf", ".set")
ENTITIES = ("sub", "ses", "task", "acq", "run")
RECORDING_PATTERN = r"sub-[A-Za-z0-9+]+(/ses-[A-Za-z0-9+]+)?/eeg/sub-[A-Za-z0-9+_-]+"
PARTICIPANT_PATTERN = r"sub-[A-Za-z0-9+]+"
# A file name has at most 255 bytes, and ours add up to 115 for what they hold and who makes them.
LONGEST_NAME = 140

# Every file of the results, by name. {recording} is such as sub-01/eeg/sub-01_task-panels and
# {participant} such as sub-01. Each has a sidecar of the same name that ends in .json, but for the
# last three, which make the results a BIDS dataset.
FILES = {
    "intake_signal": "{recording}_desc-intake_eeg.fif",
    "intake_trials": "{recording}_desc-intake_trials.tsv",
    "intake_channels": "{recording}_desc-intake_channels.tsv",
    "intake_recording": "{recording}_desc-intake_recording.tsv",
    "filter_signal": "{recording}_desc-filtered_eeg.fif",
    "filter_designs": "{recording}_desc-filtered_designs.tsv",
    "filter_gains": "{recording}_desc-filtered_gains.tsv",
    "sensors_signal": "{recording}_desc-sensors_eeg.fif",
    "sensors_verdicts": "{recording}_desc-sensors_verdicts.tsv",
    "components_ica": "{recording}_desc-components_ica.npz",
    "components_evidence": "{recording}_desc-components_evidence.tsv",
    "components_sheet": "{recording}_desc-components_sheet.png",
    "windows_signal": "{recording}_desc-clean_eeg.fif",
    "windows_components": "{recording}_desc-components_verdicts.tsv",
    "windows_verdicts": "{recording}_desc-windows_verdicts.tsv",
    "windows_gains": "{recording}_desc-cleaning_gains.tsv",
    "flicker_frequencies": "{recording}_desc-flicker_frequencies.tsv",
    "spectra_coefficients": "{participant}/eeg/{participant}_desc-terms_coefficients.npz",
    "spectra_psd": "{participant}/eeg/{participant}_desc-windows_psd.npz",
    "response_measures": "{participant}/eeg/{participant}_desc-response_measures.tsv",
    "response_windows": "{participant}/eeg/{participant}_desc-response_windows.tsv",
    "alpha_measures": "{participant}/eeg/{participant}_desc-alpha_measures.tsv",
    "alpha_windows": "{participant}/eeg/{participant}_desc-alpha_windows.tsv",
    "relation_measures": "{participant}/eeg/{participant}_desc-relation_measures.tsv",
    "relation_windows": "{participant}/eeg/{participant}_desc-relation_windows.tsv",
    "attention_measures": "{participant}/eeg/{participant}_desc-attention_measures.tsv",
    "plan_terms": "study/plan.tsv",
    "plan_page": "study/flicker_plan.txt",
    "study_responses": "study/responses.tsv",
    "study_alpha": "study/alpha.tsv",
    "study_relation": "study/relation.tsv",
    "study_attention": "study/attention.tsv",
    "study_flicker": "study/flicker.tsv",
    "study_comparisons": "study/comparisons.tsv",
    "study_participants": "study/participants.tsv",
    "study_group": "study/group_relation.tsv",
    "draft_decisions": "study/decisions_draft.tsv",
    "report_page": "report.html",
    "report_quality": "study/figures/quality.png",
    "report_bins": "study/figures/bins.png",
    "report_topographies": "study/figures/topographies.png",
    "report_responses": "study/figures/responses.png",
    "report_alpha": "study/figures/alpha.png",
    "report_relation": "study/figures/relation.png",
    "manifest_files": "manifest.tsv",
    "describe_description": "dataset_description.json",
    "describe_readme": "README",
    "describe_ignore": ".bidsignore",
}


ON_TOP = ("manifest_files", "draft_decisions")


@dataclass(frozen=True)
class Recording:
    """One EEG recording of a dataset.

    Attributes
    ----------
    name : str
        Path below the dataset without ``_eeg`` and extension, such as
        ``sub-01/ses-2/eeg/sub-01_ses-2_task-panels_run-1``.
    extension : str
    files : tuple of str
        All files that the recording is read from, its data file first.
    """

    name: str
    extension: str
    files: tuple[str, ...]

    @property
    def stem(self) -> str:
        """File name without _eeg and extension, such as ``sub-01_task-panels``."""
        return self.name.rsplit("/", 1)[-1]

    @property
    def participant(self) -> str:
        """Label with its prefix, such as ``sub-01``."""
        return self.name.split("/", 1)[0]

    @cached_property
    def entities(self) -> dict[str, str]:
        """BIDS entities of the file name."""
        return entities(self.name)


def entities(name: str) -> dict[str, str]:
    """Read the BIDS entities from a recording's name.

    Examples
    --------
    >>> entities("sub-01/eeg/sub-01_task-panels")
    {'sub': '01', 'task': 'panels'}
    """
    parts = name.rsplit("/", 1)[-1].split("_")
    return dict(part.split("-", 1) for part in parts if "-" in part)


def full_name(stem: str) -> str:
    """Name of a recording from its file name alone.

    Examples
    --------
    >>> full_name("sub-01_ses-2_task-panels")
    'sub-01/ses-2/eeg/sub-01_ses-2_task-panels'
    """
    labels = entities(stem)
    folders = [f"{key}-{labels[key]}" for key in ("sub", "ses") if key in labels]
    return "/".join([*folders, "eeg", stem])


def result(results: str, name: str) -> str:
    """Path of a file of the results, with its wildcards: the one place that makes such paths."""
    return f"{results}/{FILES[name]}"


def names(scope: str) -> list[str]:
    """Names of the files of one scope: ``recording``, ``participant`` or ``study``.

    Those of the study leave out the manifest, which lists all others, and the draft of decisions,
    which is made on request.
    """
    of_scope = {
        name: next((s for s in ("recording", "participant") if f"{{{s}}}" in path), "study")
        for name, path in FILES.items()
    }
    return [n for n, s in of_scope.items() if s == scope and n not in ON_TOP]


def sidecar(path: str | Path) -> str:
    """Path of the sidecar that belongs to an output."""
    return str(Path(path).with_suffix(".json"))


def log(results: str, step: str, scope: str) -> str:
    """Path of a step's log: ``scope`` is the wildcard that the step runs over, or ``study``."""
    return f"{results}/{LOGS}/{step}/{scope}.log"


def record_of(log_path: str) -> Path:
    """Path of the record of a job that is under way or failed, from that of its log."""
    return Path(log_path.removesuffix(".log") + RECORD_ENDING)


def benchmark(results: str, step: str, scope: str) -> str:
    """Path of the file with a step's time and memory."""
    return f"{results}/{LOGS}/{step}/{scope}.benchmark.tsv"


def check_results(results: str | Path, folder: str | Path) -> None:
    """See that results cannot fall among the data of the dataset.

    Raises
    ------
    SettingsError
        If they would, or if the folder cannot be made.
    """
    try:
        place, dataset = Path(results).resolve(), Path(folder).resolve()
    except (OSError, RuntimeError):  # the latter up to Python 3.12
        raise SettingsError(
            f"dataset.results: {results}, or the dataset {folder}, is a link that leads back to "
            "itself. Choose another folder."
        ) from None
    inside = place == dataset or dataset in place.parents
    if inside and dataset / "derivatives" not in place.parents:
        raise SettingsError(
            f"dataset.results: {results} lies in the dataset, which is only read. Choose a folder "
            f"outside it, or one below {Path(folder) / 'derivatives'}."
        )
    if place in dataset.parents:
        raise SettingsError(
            f"dataset.results: {results} holds the dataset {folder}. Choose another folder."
        )
    nearest = next(parent for parent in (place, *place.parents) if os.path.exists(parent))
    if not os.path.isdir(nearest) or not os.access(nearest, os.W_OK):
        found = "is a file" if not os.path.isdir(nearest) else "cannot be written"
        raise SettingsError(f"dataset.results: {nearest} {found}. Choose another folder.")
    for link in _links(place) if os.path.isdir(place) else ():
        raise SettingsError(
            f"dataset.results: {link} is a link, so what is made would land elsewhere. Put a "
            "folder in its place; dataset.results itself may be a link."
        )


def _links(folder: Path, depth: int = 3) -> Iterator[Path]:
    """Links to folders in a folder of results, as deep as its recordings lie."""
    for path in (folder / name for name in _names(folder) if not name.startswith(".")):
        if path.is_symlink():
            if os.path.isdir(path):
                yield path
        elif depth and os.path.isdir(path):
            yield from _links(path, depth - 1)


def find_recordings(
    folder: str | Path, tasks: Collection[str] = (), participants: Collection[str] = ()
) -> list[Recording]:
    """List the EEG recordings of a BIDS dataset, by folder listings alone; see `check_files`.

    Parameters
    ----------
    folder : path
        Root of the dataset; derivatives, sourcedata and code are never entered.
    tasks, participants : collection of str
        Labels to take; empty takes all.

    Raises
    ------
    SettingsError
        If the folder is no dataset or holds no such recording.
    DataError
        If names are not those of BIDS.
    """
    folder = Path(folder)
    if not os.path.isdir(folder):
        found = "is a file" if os.path.exists(folder) else "does not exist"
        raise SettingsError(
            f"dataset.folder: {folder} {found}; give the folder that holds sub-… folders and "
            "dataset_description.json."
        )
    if not os.path.isfile(folder / "dataset_description.json"):
        raise SettingsError(
            f"dataset.folder: {folder} has no dataset_description.json, which BIDS requires; give "
            "the folder that holds it, or write one with at least Name and BIDSVersion."
        )
    wanted = {f"sub-{label}" for label in participants}
    present = participant_folders(folder)
    missing = sorted(wanted - set(present))
    if missing:
        raise SettingsError(
            f"dataset.participants: {folder} has no {', '.join(missing)}; it has "
            f"{', '.join(present) or 'no sub-… folder'}. Labels stand there without sub-."
        )
    recordings = []
    shared = _data_files(folder)
    for subject in sorted(wanted or present):
        root = folder / subject
        inherited = shared + _data_files(root)
        recordings += _in_folder(folder, root / "eeg", inherited)
        for session in _folders(root, "ses-"):
            own = inherited + _data_files(root / session)
            recordings += _in_folder(folder, root / session / "eeg", own)
    if tasks:
        found_tasks = {r.entities.get("task", "") for r in recordings}
        missing_tasks = sorted(set(tasks) - found_tasks)
        if missing_tasks:
            raise SettingsError(
                f"dataset.tasks: no recording of {folder} has task {', '.join(missing_tasks)}; "
                f"there are {', '.join(sorted(found_tasks)) or 'no recordings'}."
            )
        recordings = [r for r in recordings if r.entities["task"] in tasks]
    if not recordings:
        raise SettingsError(
            f"dataset.folder: {folder} has no EEG recording; expected files such as "
            f"sub-01/eeg/sub-01_task-x_eeg{EEG_FORMATS[0]} ({', '.join(EEG_FORMATS)})."
        )
    _check_case([recording.name for recording in recordings])
    return recordings


def check_files(recordings: Sequence[Recording]) -> None:
    """See that each recording stands there in one format, and that its files have content.

    A dataset may be links to files that are fetched later, one by one.

    Raises
    ------
    DataError
        If one does not.
    """
    for recording in recordings:
        data = [f"{recording.stem}_eeg{extension}" for extension in EEG_FORMATS]
        formats = [Path(f).suffix for f in recording.files if Path(f).name in data]
        if len(formats) > 1:
            raise DataError(
                f"{recording.name}_eeg stands there as {' and '.join(formats)}; "
                "keep one of them, or move the other below sourcedata/."
            )
    files = {file for recording in recordings for file in recording.files}
    broken = sorted(f for f in files if os.path.islink(f) and not os.path.exists(f))
    if not broken:
        return
    first, target = broken[0], os.readlink(broken[0])
    others = f" and {len(broken) - 1} more" if len(broken) > 1 else ""
    if ".git/annex/" in target:
        found, advice = (
            "the content was not fetched",
            "Fetch it with `datalad get` or `git annex get`",
        )
    else:
        found, advice = f"a link to {target}, which leads nowhere", "Put the file there"
    raise DataError(f"{first}{others}: {found}. {advice}, or leave the recording out.")


def participant_folders(folder: str | Path) -> list[str]:
    """Participants that have a folder in the dataset, with sub-."""
    return _folders(Path(folder), "sub-")


def _names(folder: Path) -> list[str]:
    try:
        return sorted(os.listdir(folder))
    except OSError as error:
        raise SettingsError(
            f"{folder} cannot be listed ({error.strerror}); ask for the right to read it."
        ) from None


def _folders(parent: Path, prefix: str) -> list[str]:
    """Names of the folders that begin with a prefix; a file of such a name is a mistake."""
    names = [name for name in _names(parent) if name.startswith(prefix)]
    for name in names:
        if not os.path.isdir(parent / name) and "." not in name:
            _refuse_no_folder(parent / name)
    return [name for name in names if os.path.isdir(parent / name)]


def _refuse_no_folder(path: Path) -> None:
    found = "is a file" if os.path.exists(path) else "is a link that leads nowhere"
    raise DataError(f"{path} {found}, expected a folder; remove it from the dataset.")


def _check_case(recordings: Sequence[str]) -> None:
    """BIDS forbids names that differ in case alone: on many disks they are the same."""
    seen: dict[str, str] = {}
    for name in recordings:
        other = seen.setdefault(name.casefold(), name)
        if other != name:
            raise DataError(
                f"{other} and {name} differ by capital letters only, which BIDS forbids; rename "
                "one, or choose with dataset.participants."
            )


def _check_name(name: str) -> None:
    """See that a recording's name is one of BIDS that results can be named after."""
    *folders, _, stem = name.split("/")
    parts, found = stem.split("_"), entities(name)
    advice = "Rename its files, or choose others with dataset.participants."
    if not re.fullmatch(RECORDING_PATTERN, name) or not all(
        re.fullmatch(r"[a-z]+-[A-Za-z0-9+]+", part) for part in parts
    ):
        raise DataError(
            f"{f'{name}_eeg'!r}: expected a name of entities and labels of letters and digits, "
            f"such as sub-01_task-x_run-1_eeg. {advice}"
        )
    unknown = [key for key in found if key not in ENTITIES]
    if unknown or "task" not in found:
        what = f"the entity {unknown[0]}- is not known here" if unknown else "there is no task-"
        raise DataError(f"{name}_eeg: {what}; expected {'-, '.join(ENTITIES)}-. {advice}")
    if len(found) < len(parts):
        raise DataError(f"{name}_eeg: an entity stands there twice. {advice}")
    if parts[: len(folders)] != folders or ("ses" in found) != (len(folders) == 2):
        raise DataError(
            f"{name}_eeg: sub- and ses- in front of the name are not those of its folder. {advice}"
        )
    if len(stem) > LONGEST_NAME:
        raise DataError(
            f"{name}_eeg: the name has {len(stem)} characters, expected at most {LONGEST_NAME}, "
            f"since names of results are made from it. {advice}"
        )


def _data_files(folder: Path) -> list[str]:
    """Files of a folder that recordings below it may inherit."""
    if not os.path.isdir(folder):
        return []
    pattern = re.compile(r"(?:.*_)?(?:eeg|events|channels|electrodes|coordsystem)\.(?:json|tsv)$")
    return [str(folder / name) for name in _names(folder) if pattern.match(name)]


def _in_folder(dataset: Path, folder: Path, inherited: list[str]) -> list[Recording]:
    if not os.path.isdir(folder):
        if os.path.lexists(folder):
            _refuse_no_folder(folder)
        return []
    # a name that begins with a dot is a system's own, such as ._sub-01_task-x_eeg.edf
    names = [name for name in _names(folder) if not name.startswith(".")]
    stems: dict[str, list[str]] = defaultdict(list)
    for name in names:
        for extension in EEG_FORMATS:
            if name.endswith(f"_eeg{extension}"):
                stems[name.removesuffix(f"_eeg{extension}")].append(extension)
    recordings = []
    for stem, extensions in stems.items():
        _check_name((folder / stem).relative_to(dataset).as_posix())
        data = f"{stem}_eeg{extensions[0]}"
        others = [name for name in names if name != data and _belongs(name, stem)]
        files = [str(folder / data), *(str(folder / name) for name in others)]
        files += [path for path in inherited if _applies(path, stem)]
        for path in files:
            if set(path) & set("{}"):  # Snakemake would take them for a wildcard
                raise DataError(f"{path!r} has braces in its name, as no file of BIDS; rename it.")
        name = (folder / stem).relative_to(dataset).as_posix()
        recordings.append(Recording(name, extensions[0], tuple(files)))
    return recordings


def _belongs(name: str, stem: str) -> bool:
    """Tell whether a file of the same folder describes the recording: its entities are a part."""
    suffix = name.rsplit("_", 1)[-1]
    kinds = ("eeg.", "events.", "channels.", "electrodes.", "coordsystem.")
    return suffix.startswith(kinds) and _applies(name, stem)


def _applies(path: str, stem: str) -> bool:
    """BIDS inheritance: a file applies where all of its entities agree with the recording's."""
    own, wanted = entities(stem), entities(Path(path).name.rsplit("_", 1)[0])
    wanted.pop("space", None)
    return all(own.get(key) == value for key, value in wanted.items())
