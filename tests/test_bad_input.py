"""Bad input gets one clear message, or is understood: what, where, what was expected, what to do.

Each case damages a small dataset in one way and calls the edge as the workflow does.
"""

import json
import os
import re
import shutil
from dataclasses import dataclass, replace
from pathlib import Path
from types import SimpleNamespace

import components as components_step
import intake as intake_step
import numpy as np
import plan as plan_step
import pytest
import realdata
import sensors as sensors_step
import spectra as spectra_step
import yaml
from onbin import arrays, dataset, layout, plan, tables
from onbin.errors import OnbinError, SettingsError
from onbin.runner import run
from onbin.settings import load_settings, part
from scipy.io import savemat
from test_runner import Named

ROOT = Path(__file__).parents[1]
RATE_HZ, DURATION_S = 200, 30
CHANNELS = ("Fp1", "Fp2", "Fz", "Cz", "Pz", "O1", "Oz", "O2", "HEOG")
UV_PER_DIGIT = 0.1
FORMATS = {"01": ".vhdr", "02": ".edf", "03": ".bdf"}
EVENTS = "onset\tduration\ttrial_type\n2\t8\tleft\n12\t8\tright\n22\t6\trest\n"
SETTINGS = {
    "study": {"title": "Small"},
    "tags": {"panel": {"frequency_hz": 10}, "lamp": {"frequency_hz": 15}},
    "conditions": {
        "left": {"events": {"trial_type": "left"}, "flickering": ["panel", "lamp"]},
        "right": {"events": {"trial_type": "right"}, "flickering": ["panel", "lamp"]},
        "rest": {"events": {"trial_type": "rest"}},
    },
    "regions": {"occipital": ["O1", "Oz", "O2"]},
    "windows": {"length_s": 2.0},
    "alpha": {"region": "occipital"},
    "relation": {"response_region": "occipital"},
}


# --- a small dataset, by hand ---


def digits():
    """Samples of 20 µV of noise, shape (n_channels, n_times); some have the bytes of line ends."""
    noise = np.random.default_rng(1).normal(size=(len(CHANNELS), RATE_HZ * DURATION_S))
    samples = np.round(20 * noise / UV_PER_DIGIT).astype(int)
    samples[0, :300:100] = int.from_bytes(b"\r\n", "little")
    return samples


def write_brainvision(path, samples):
    lines = [
        "Brain Vision Data Exchange Header File Version 1.0",
        "[Common Infos]",
        "Codepage=UTF-8",
        f"DataFile={path.stem}.eeg",
        f"MarkerFile={path.stem}.vmrk",
        "DataFormat=BINARY",
        "DataOrientation=MULTIPLEXED",
        f"NumberOfChannels={len(CHANNELS)}",
        f"SamplingInterval={1e6 / RATE_HZ:g}",
        "[Binary Infos]",
        "BinaryFormat=INT_16",
        "[Channel Infos]",
        *(f"Ch{i}={name},,{UV_PER_DIGIT},µV" for i, name in enumerate(CHANNELS, start=1)),
    ]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    path.with_suffix(".vmrk").write_text(
        "Brain Vision Data Exchange Marker File, Version 1.0\n"
        f"[Common Infos]\nCodepage=UTF-8\nDataFile={path.stem}.eeg\n[Marker Infos]\n",
        encoding="utf-8",
    )
    path.with_suffix(".eeg").write_bytes(samples.T.astype("<i2").tobytes())


def write_edf(path, samples):
    """EDF (Kemp et al. 1992) or, of 24 bits, BDF; records of one second."""
    bdf, n = path.suffix == ".bdf", len(CHANNELS)
    top = 2**23 if bdf else 2**15
    signals = [
        *((name, 16) for name in CHANNELS),
        *(("", 80) for _ in CHANNELS),
        *(("uV", 8) for _ in CHANNELS),
        *((f"{-top * UV_PER_DIGIT:.0f}", 8) for _ in CHANNELS),
        *((f"{top * UV_PER_DIGIT:.0f}", 8) for _ in CHANNELS),
        *((-top, 8) for _ in CHANNELS),
        *((top - 1, 8) for _ in CHANNELS),
        *(("", 80) for _ in CHANNELS),
        *((RATE_HZ, 8) for _ in CHANNELS),
        *(("", 32) for _ in CHANNELS),
    ]
    fields = [
        ("\xffBIOSEMI" if bdf else "0", 8), ("X X X X", 80), ("Startdate X X X X", 80),
        ("01.01.26", 8), ("10.00.00", 8), (256 * (n + 1), 8), ("24BIT" if bdf else "", 44),
        (DURATION_S, 8), (1, 8), (n, 4), *signals,
    ]  # fmt: skip
    header = "".join(str(value).ljust(width) for value, width in fields).encode("latin-1")
    records = samples.reshape(n, DURATION_S, RATE_HZ).transpose(1, 0, 2).astype("<i4")
    if bdf:
        data = records[..., None].view("u1")[..., :3].tobytes()
    else:
        data = records.astype("<i2").tobytes()
    path.write_bytes(header + data)


def write_dataset(root):
    root.mkdir()
    (root / "dataset_description.json").write_text('{"Name": "Small", "BIDSVersion": "1.10.0"}')
    people = "".join(f"sub-{label}\t30\n" for label in FORMATS)
    (root / "participants.tsv").write_text(f"participant_id\tage\n{people}")
    samples = digits()
    for label, extension in FORMATS.items():
        folder = root / f"sub-{label}" / "eeg"
        folder.mkdir(parents=True)
        stem = folder / f"sub-{label}_task-x"
        write = write_brainvision if extension == ".vhdr" else write_edf
        write(Path(f"{stem}_eeg{extension}"), samples)
        told = {
            "TaskName": "x",
            "EEGReference": "n/a",
            "SamplingFrequency": RATE_HZ,
            "PowerLineFrequency": 50,
            "SoftwareFilters": "n/a",
            "RecordingDuration": DURATION_S,
        }
        Path(f"{stem}_eeg.json").write_text(json.dumps(told, indent=1))
        Path(f"{stem}_events.tsv").write_text(EVENTS)
        rows = [f"{name}\t{'EOG' if name == 'HEOG' else 'EEG'}\tµV\tgood\n" for name in CHANNELS]
        Path(f"{stem}_channels.tsv").write_text(f"name\ttype\tunits\tstatus\n{''.join(rows)}")


@dataclass(frozen=True)
class Study:
    """A copy of the small dataset that a case may damage, and the recording it is about."""

    root: Path
    label: str = "01"
    run: str = ""

    @property
    def name(self):
        return f"sub-{self.label}/eeg/sub-{self.label}_task-x{self.run}"

    def at(self, suffix):
        return self.root / f"{self.name}_{suffix}"

    @property
    def data(self):
        return self.at(f"eeg{FORMATS[self.label]}")

    @property
    def results(self):
        return self.root.parent / "results"


@pytest.fixture(scope="session")
def sound(tmp_path_factory):
    root = tmp_path_factory.mktemp("sound") / "bids"
    write_dataset(root)
    return root


@pytest.fixture
def study(sound, tmp_path):
    shutil.copytree(sound, tmp_path / "bids", symlinks=True)
    return Study(tmp_path / "bids")


# --- ways to damage it ---


def write(suffix, text):
    def damage(study):
        content = text if isinstance(text, bytes) else text.encode()
        study.at(suffix).write_bytes(content)

    return damage


def change(suffix, *pairs):
    def damage(study):
        content = study.at(suffix).read_bytes()
        for old, new in pairs:
            old, new = (t.encode() if isinstance(t, str) else t for t in (old, new))
            assert old in content
            content = content.replace(old, new, 1)
        study.at(suffix).write_bytes(content)

    return damage


def tell(**keys):
    """Change keys of eeg.json; None takes a key away."""

    def damage(study):
        told = json.loads(study.at("eeg.json").read_text()) | keys
        told = {key: value for key, value in told.items() if value is not None}
        study.at("eeg.json").write_text(json.dumps(told))

    return damage


def remove(suffix):
    return lambda study: study.at(suffix).unlink()


def cut(suffix, share):
    """Leave a share of a file."""

    def damage(study):
        content = study.at(suffix).read_bytes()
        study.at(suffix).write_bytes(content[: int(share * len(content))])

    return damage


def patch(suffix, start, text):
    """Write over a field of a header."""

    def damage(study):
        content = bytearray(study.at(suffix).read_bytes())
        content[start : start + len(text)] = text.encode()
        study.at(suffix).write_bytes(content)

    return damage


def of(label, damage):
    """Damage the recording of another format."""
    return lambda study: damage(replace(study, label=label))


def link(suffix, target):
    def damage(study):
        study.at(suffix).unlink()
        study.at(suffix).symlink_to(target)

    return damage


def rename(old, new):
    """Rename a recording's folder and files."""

    def damage(study):
        folder = study.root / "sub-01"
        for path in list((folder / "eeg").iterdir()):
            path.rename(path.with_name(path.name.replace(old, new)))
        folder.rename(study.root / "sub-01".replace(old, new))

    return damage


def change_samples(change_them):
    """Rewrite the BrainVision samples as single precision, changed."""

    def damage(study):
        samples = digits().astype(float) * UV_PER_DIGIT
        change_them(samples)
        study.at("eeg.eeg").write_bytes(samples.T.astype("<f4").tobytes())
        header = study.at("eeg.vhdr").read_text().replace("INT_16", "IEEE_FLOAT_32")
        study.at("eeg.vhdr").write_text(header.replace(f",,{UV_PER_DIGIT},", ",,1,"))

    return damage


def rescale(factor):
    def multiply(samples):
        samples *= factor

    return change_samples(multiply)


def put(value):
    def spoil(samples):
        samples[3, 777] = value

    return change_samples(spoil)


# --- the edge, called as the workflow does ---


def settings_of(study, **changes):
    path = study.root.parent / "study.yaml"
    raw = {**SETTINGS, "dataset": {"folder": str(study.root), "results": str(study.results)}}
    path.write_text(yaml.safe_dump(raw | changes, sort_keys=False))
    return load_settings(path)


def rule_of(step, file):
    """Names of the outputs and of the parts of the settings that a rule gives its script."""
    rule = (ROOT / "rules" / f"{file}.smk").read_text().split(f"rule {step}:")[1].split("rule ")[0]
    outputs = re.search(rf'made\("{step}", ([^)]*)\)', rule)[1]
    parts = re.split(r"\*\*|\w+=|\)", rule.split("settings_part(")[1])[0]
    return re.findall(r'"(\w+)"', outputs), re.findall(r'"([\w.*]+)"', parts)


def run_step(study, step, do, inputs, file="cleaning", own=(), **changes):
    """Run a step with what its rule hands it; return its job."""
    names, parts = rule_of(step, file)
    outputs = {
        name: layout.result(str(study.results), f"{step}_{name}").format(
            recording=study.name, participant=f"sub-{study.label}"
        )
        for name in names
    }
    job = SimpleNamespace(
        input=Named(**inputs),
        output=Named(**outputs, sidecars=[layout.sidecar(path) for path in outputs.values()]),
        params=Named(settings=part(settings_of(study, **changes), *parts) | dict(own)),
        log=[str(study.root.parent / "logs" / step / "log")],
        rule=step,
        wildcards=Named(recording=study.name),
    )
    run(do, job)
    return job


def intake(study, **changes):
    settings = settings_of(study, **changes)
    layout.check_results(settings.dataset.results, settings.dataset.folder)
    found = layout.find_recordings(settings.dataset.folder)
    (recording,) = [r for r in found if r.name == study.name]
    layout.check_files([recording])
    own = {
        "folder": settings.dataset.folder,
        "recording": recording.name,
        "extension": recording.extension,
    }
    inputs = {"files": list(recording.files)}
    return run_step(study, "intake", intake_step.intake, inputs, "intake", own, **changes)


def plan_flicker(study, **changes):
    settings = settings_of(study, **changes)
    found = layout.find_recordings(settings.dataset.folder)
    own = part(settings, *plan.SETTINGS) | {"recordings": [recording.name for recording in found]}
    return run_step(study, "plan", plan_step.plan_flicker, {}, "audit", own, **changes)


def judge_sensors(study, taken_in, **changes):
    inputs = {"signal": taken_in.output.signal, "recorded": taken_in.output.signal}
    own = {"decisions": [], "decisions_file": "decisions.tsv", "recording": Path(study.name).name}
    return run_step(study, "sensors", sensors_step.judge_sensors, inputs, own=own, **changes)


def assert_plain(text, *words):
    """One message without a trace of Python, which holds all that is expected of it."""
    for word in words:
        assert word in text
    for trace in ("Traceback", "unexpectedly", "Error:", "NoneType", "np.", "mne_bids", "pydantic"):
        assert trace not in text


def assert_refused(study, capfd, call, *words, step="desc-intake", lines=1):
    """The step ends with 1 and one message; nothing is left of its outputs."""
    with pytest.raises(SystemExit) as ended:
        call()
    assert ended.value.code == 1
    out, err = capfd.readouterr()
    assert out == ""
    assert len(err.strip().splitlines()) == lines
    assert err.rstrip().endswith(".")
    assert_plain(err, *words)
    left = [p.name for p in study.results.rglob("*") if p.is_file() or ".part-" in p.name]
    assert [name for name in left if step in name or ".part-" in name] == []


# --- recordings that cannot be used ---

ANNEX = "../../.git/annex/objects/aa/bb/SHA256E-s1/SHA256E-s1"
HEADER_END = 256 * (len(CHANNELS) + 1)


def events(*lines, header="onset\tduration\ttrial_type"):
    return write("events.tsv", "\n".join([header, *lines]) + "\n")


def channels(*lines, header="name\ttype\tunits\tstatus"):
    return write("channels.tsv", "\n".join([header, *lines]) + "\n")


def electrodes(text, coordsystem='{"EEGCoordinateSystem": "CapTrak", "EEGCoordinateUnits": "m"}'):
    def damage(study):
        (study.root / "sub-01/eeg/sub-01_electrodes.tsv").write_text(text)
        if coordsystem is not None:
            (study.root / "sub-01/eeg/sub-01_coordsystem.json").write_text(coordsystem)

    return damage


def mangle(old, new):
    def damage(study):
        content = study.data.read_bytes()
        start = 0 if study.data.suffix == ".vhdr" else HEADER_END
        path = study.at("eeg.eeg") if study.data.suffix == ".vhdr" else study.data
        content = path.read_bytes()
        path.write_bytes(content[:start] + content[start:].replace(old, new))

    return damage


def mangle_and_cut(study):
    """As when a file was sent as text, to a place that had room for its true length only."""
    size = study.data.stat().st_size
    mangle(b"\n", b"\r\n")(study)
    study.data.write_bytes(study.data.read_bytes()[:size])


def both(*damages):
    return lambda study: [damage(study) for damage in damages]


def all_rows(kind="EEG", status="good"):
    return [f"{name}\t{kind}\tµV\t{status}" for name in CHANNELS]


WRONG_UNITS = ("expected 0.01 to 100000", "unit in the data file", "volts")
BAD_RECORDINGS = {
    # the data file
    "brainvision_truncated": (
        "01", cut("eeg.eeg", 0.5), ["eeg.vhdr", "has 15 s", "RecordingDuration", "30 s", "anew"]),
    "brainvision_cut_within_a_sample": (
        "01", lambda s: s.at("eeg.eeg").write_bytes(s.at("eeg.eeg").read_bytes()[:-5]),
        ["eeg.eeg", "107995 bytes", "18 bytes each", "anew"]),
    "brainvision_of_zero_length": (
        "01", write("eeg.eeg", ""), ["task-x_eeg.eeg is empty", "0 bytes", "anew"]),
    "brainvision_header_of_zero_length": (
        "01", write("eeg.vhdr", ""), ["eeg.vhdr is empty", "anew"]),
    "brainvision_without_data_file": (
        "01", remove("eeg.eeg"), ["DataFile is sub-01_task-x_eeg.eeg", "not beside it", "Put it"]),
    "brainvision_without_marker_file": (
        "01", remove("eeg.vmrk"), ["MarkerFile is sub-01_task-x_eeg.vmrk", "not beside it"]),
    "brainvision_renamed_outside": (
        "01", change("eeg.vhdr", ("DataFile=sub-01", "DataFile=visit7")),
        ["DataFile is visit7_task-x_eeg.eeg", "correct the header"]),
    "brainvision_header_of_another_kind": (
        "01", write("eeg.vhdr", "no header\n"), ["eeg.vhdr has no DataFile", "anew"]),
    "brainvision_number_of_channels": (
        "01", change("eeg.vhdr", ("NumberOfChannels=9", "NumberOfChannels=7")),
        ["NumberOfChannels is 7", "9 channels are listed", "anew"]),
    "brainvision_number_that_is_none": (
        "01", change("eeg.vhdr", ("SamplingInterval=5000", "SamplingInterval=often")),
        ["SamplingInterval is 'often'", "expected a number", "anew"]),
    "brainvision_sampling_interval_of_zero": (
        "01", change("eeg.vhdr", ("SamplingInterval=5000", "SamplingInterval=0")),
        ["SamplingInterval is '0'", "above 0"]),
    "brainvision_unknown_binary_format": (
        "01", change("eeg.vhdr", ("INT_16", "INT_24")), ["BinaryFormat is INT_24", "INT_16"]),
    "brainvision_as_text": (
        "01", change("eeg.vhdr", ("BINARY", "ASCII")), ["DataFormat is ASCII", "BINARY"]),
    "brainvision_line_ends_changed": (
        "01", mangle(b"\n", b"\r\n"), ["eeg.eeg", "line feeds", "as if it were text", "binary"]),
    "edf_truncated": (
        "02", of("02", cut("eeg.edf", 0.7)), ["eeg.edf", "30 data records, 30 s", "20", "anew"]),
    "edf_of_zero_length": ("02", of("02", write("eeg.edf", "")), ["eeg.edf is empty", "anew"]),
    "edf_cut_within_its_header": (
        "02", of("02", cut("eeg.edf", 0.005)), ["9 signals", "header of 2560 bytes", "anew"]),
    "edf_that_is_another_file": (
        "02", of("02", write("eeg.edf", "PK\x03\x04 zipped" * 99)),
        ["does not begin as a file of EDF", "PK", "anew"]),
    "edf_line_ends_changed": (
        "02", of("02", mangle(b"\n", b"\r\n")), ["eeg.edf", "as if it were text", "binary mode"]),
    "edf_line_ends_changed_and_cut_to_length": (
        "02", of("02", mangle_and_cut), ["eeg.edf", "as if it were text", "binary mode"]),
    "edf_line_ends_taken_away": (
        "02", of("02", mangle(b"\r\n", b"\n")), ["eeg.edf", "30 data records", "cut or changed"]),
    "edf_number_of_signals": (
        "02", of("02", patch("eeg.edf", 252, "12  ")), ["12 signals", "3328 bytes", "2560"]),
    "edf_number_of_signals_is_none": (
        "02", of("02", patch("eeg.edf", 252, "nine")), ["number of signals is 'nine'", "whole"]),
    "edf_number_of_records": (
        "02", of("02", patch("eeg.edf", 236, "20      ")),
        ["the header says 20 data records", "the file has 30", "anew"]),
    "edf_header_bytes": (
        "02", of("02", patch("eeg.edf", 184, "512     ")), ["2560 bytes", "says 512", "anew"]),
    "edf_record_of_no_duration": (
        "02", of("02", patch("eeg.edf", 244, "0       ")), ["duration of a data record is '0'"]),
    "edf_that_was_not_closed_and_cut_within_a_record": (
        "02", of("02", lambda s: (patch("eeg.edf", 236, "-1      ")(s), cut("eeg.edf", 0.7)(s))),
        ["does not say how many", "20 of 3600 bytes, 20 s, and 2832 bytes more", "anew"]),
    "edf_that_was_not_closed_and_has_no_record": (
        "02", of("02", lambda s: (patch("eeg.edf", 236, "-1      ")(s), cut("eeg.edf", 0.03)(s))),
        ["does not say how many", "the file has 0 of 3600 bytes", "cut or changed"]),
    "edf_without_samples_of_a_channel": (
        "02", of("02", patch("eeg.edf", 256 + 9 * 216, "0       ")),
        ["samples a record of Fp1 is '0'", "above 0", "anew"]),
    "edf_with_fewer_samples_than_none": (
        "02", of("02", patch("eeg.edf", 256 + 9 * 216 + 8, "-200    ")),
        ["samples a record of Fp2 is '-200'", "above 0", "anew"]),
    "edf_interrupted": (
        "02", of("02", patch("eeg.edf", 192, "EDF+D")), ["interrupted (EDF+D)", "continuous"]),
    "edf_two_channels_of_one_name": (
        "02", of("02", patch("eeg.edf", 256 + 16, "Fp1")), ["2 channels", "called Fp1", "anew"]),
    "bdf_truncated": (
        "03", of("03", cut("eeg.bdf", 0.7)), ["eeg.bdf", "30 data records, 30 s", "20", "anew"]),
    "bdf_of_zero_length": ("03", of("03", write("eeg.bdf", "")), ["eeg.bdf is empty", "anew"]),
    "bdf_that_is_an_edf": (
        "03", of("03", patch("eeg.bdf", 0, "0       ")),
        ["does not begin as a file of BDF", "found '0", "anew"]),
    "edf_limit_that_is_no_number": (
        "02", of("02", patch("eeg.edf", 256 + 9 * 104, "lots    ")),
        ["a limit of Fp1 is 'lots'", "expected a number", "anew"]),
    "edf_limits_that_are_alike": (
        "02", of("02", patch("eeg.edf", 256 + 9 * 120, "32767   ")),
        ["lower and the upper limit of Fp1", "32767", "anew"]),
    "brainvision_resolution_of_zero": (
        "01", change("eeg.vhdr", (f"Ch1=Fp1,,{UV_PER_DIGIT}", "Ch1=Fp1,,0")),
        ["resolution of Fp1 is '0'", "other than 0", "anew"]),
    "brainvision_marker_that_is_none": (
        "01", change("eeg.vmrk", ("[Marker Infos]", "[Marker Infos]\nMk1=Stimulus,S1,soon,1")),
        ["eeg.vhdr cannot be read", "the log tells", "Export"]),
    "data_file_is_a_folder": (
        "02", lambda s: (of("02", remove("eeg.edf"))(s), of("02", lambda t: t.data.mkdir())(s)),
        ["eeg.edf cannot be read", "directory", "is a file"]),
    "content_of_an_unlocked_file_not_fetched": (
        "02", of("02", write("eeg.edf", "/annex/objects/SHA256E-s1--ab.edf\n")),
        ["eeg.edf", "content was not fetched", "git annex get"]),
    # samples
    "a_sample_is_nan": ("01", put(np.nan), ["Cz", "not finite", "Export"]),
    "a_sample_is_infinite": ("01", put(np.inf), ["Cz", "not finite", "Export"]),
    "volts_given_as_microvolts": ("01", rescale(1e-6), WRONG_UNITS),
    "microvolts_given_as_volts": (
        "01", change("eeg.vhdr", *((f",,{UV_PER_DIGIT},µV", f",,{UV_PER_DIGIT},V"),) * 9),
        WRONG_UNITS),
    "edf_without_a_unit": (
        "02", of("02", patch("eeg.edf", 256 + 9 * 96, " " * 72)), WRONG_UNITS),
    "nothing_but_zeros": ("01", rescale(0), WRONG_UNITS),
    # eeg.json
    "no_eeg_json": (
        "01", remove("eeg.json"), ["no eeg.json applies to sub-01", "SamplingFrequency", "Write"]),
    "no_sampling_frequency": (
        "01", tell(SamplingFrequency=None), ["has no SamplingFrequency", "add it (200)"]),
    "another_sampling_frequency": (
        "01", tell(SamplingFrequency=256), ["has 200 samples a second", "is 256", "Correct"]),
    "sampling_frequency_as_text": (
        "01", tell(SamplingFrequency="200 Hz"), ["SamplingFrequency", "'200 Hz'", "above 0"]),
    "no_power_line_frequency": (
        "01", tell(PowerLineFrequency=None), ["no PowerLineFrequency", "add it", "filter.line_hz"]),
    "power_line_frequency_below_zero": (
        "01", tell(PowerLineFrequency=-50), ["PowerLineFrequency", "-50", "number above 0"]),
    "epochs_in_place_of_a_recording": (
        "01", tell(RecordingType="epoched"), ["RecordingType", "epoched", "expected continuous"]),
    "duration_as_text": (
        "01", tell(RecordingDuration="long"), ["RecordingDuration", "'long'", "number above 0"]),
    "events_json_that_is_a_list": (
        "01", write("events.json", "[]"), ["events.json holds a list", "correct it"]),
    "invalid_json": (
        "01", write("eeg.json", '{"TaskName": "x",\n}'), ["eeg.json, line 2", "not valid JSON"]),
    "json_that_is_a_list": (
        "01", write("eeg.json", "[1, 2]"), ["eeg.json holds a list", "expected {", "correct it"]),
    "empty_json": ("01", write("eeg.json", ""), ["eeg.json is empty", "anew"]),
    "json_in_another_encoding": (
        "01", write("eeg.json", '{"a": "µ"}'.encode("latin-1")), ["eeg.json", "not text in UTF-8"]),
    "json_with_a_byte_order_mark": (  # RFC 8259, section 8.1
        "01", change("eeg.json", (b"{", b"\xef\xbb\xbf{")), ["byte-order mark", "save it"]),
    # channels.tsv
    "channels_without_names": (
        "01", channels("EEG\tµV", header="type\tunits"), ["no column name", "type, units", "Add"]),
    "channels_without_types": (
        "01", channels("Fz\tµV", header="name\tunits"), ["no column type", "name, units", "Add"]),
    "channels_of_another_recording": (
        "01", channels("Fz\tEEG\tµV\tgood", "A1\tEEG\tµV\tgood"),
        ["channels.tsv", "eeg.vhdr", "A1 in the table alone", "Oz, O2, HEOG in the data file"]),
    "a_channel_twice": (
        "01", channels(*all_rows(), "Oz\tEEG\tµV\tbad"), ["Oz", "line 8 and line 11", "keep one"]),
    "unknown_channel_type": (
        "01", change("channels.tsv", ("Cz\tEEG", "Cz\tEGG")),
        ["channels.tsv, line 5", "'EGG'", "expected one of BIDS"]),
    "misspelt_status": (
        "01", change("channels.tsv", ("Cz\tEEG\tµV\tgood", "Cz\tEEG\tµV\tbda")),
        ["channels.tsv, line 5", "'bda'", "expected good, bad"]),
    "no_eeg_among_channels": (
        "01", channels(*all_rows("MISC")), ["no channel is EEG", "misc", "Set type EEG"]),
    "channels_with_a_ragged_row": (
        "01", channels("Fz\tEEG"), ["channels.tsv, line 2", "2 cells", "expected 4"]),
    # events.tsv
    "no_events": ("01", remove("events.tsv"), ["no events.tsv", "task-x", "Add"]),
    "empty_events": ("01", write("events.tsv", ""), ["events.tsv is empty", "anew"]),
    "events_without_rows": ("01", events(), ["events.tsv has no event", "no rows", "conditions"]),
    "events_without_onset": (
        "01", events("8\tleft", header="duration\ttrial_type"), ["no column onset", "BIDS"]),
    "events_without_duration": (
        "01", events("8\tleft", header="onset\ttrial_type"), ["no column duration", "BIDS"]),
    "events_of_unknown_conditions": (
        "01", events("2\t8\tup", "12\t8\tdown"), ["trial_type: down, up", "conditions"]),
    "event_before_the_recording": (
        "01", events("-1\t8\tleft"), ["line 2", "from -1 to 7 s", "0 to 30 s", "Correct"]),
    "event_after_the_recording": (
        "01", events("2\t8\tleft", "45\t8\tleft"), ["line 3", "45 to 53 s", "0 to 30 s"]),
    "event_partly_after_the_recording": (
        "01", events("23\t8\tleft"), ["line 2", "23 to 31 s", "0 to 30 s", "Correct"]),
    "an_event_twice": (
        "01", events("2\t8\tleft", "9\t1\tx", "2\t8\tleft"), ["line 2 and line 4", "keep one"]),
    "overlapping_conditions": (
        "01", events("2\t8\tleft", "9\t8\tright"),
        ["line 2 and line 3", "left lasts from 2 to 10 s", "right begins at 9 s", "correct"]),
    "overlapping_trials_of_one_condition": (
        "01", events("2\t8\tleft", "9\t8\tleft"), ["line 2 and line 3", "begins at 9 s"]),
    "onset_that_is_no_number": (
        "01", events("soon\t8\tleft"), ["line 2", "onset is 'soon'", "number of seconds"]),
    "onset_that_is_infinite": ("01", events("inf\t8\tleft"), ["line 2", "onset is 'inf'"]),
    "onset_with_a_decimal_comma": ("01", events("2,5\t8\tleft"), ["line 2", "onset is '2,5'"]),
    "negative_duration": (
        "01", events("2\t-8\tleft"), ["line 2", "duration is '-8'", "number of seconds"]),
    "no_duration_anywhere": (
        "01", events("2\tn/a\tleft"), ["line 2", "no duration", "conditions.left.duration_s"]),
    "mistake_behind_blank_lines": (
        "01", events("", "2\t8\tleft", "", "", "x\t8\tleft"), ["line 6", "onset is 'x'"]),
    "place_behind_blank_lines": (
        "01", events("", "2\t8\tleft", "", "45\t8\tleft"), ["line 5", "45 to 53 s"]),
    "events_with_a_ragged_row": (
        "01", events("2\t8"), ["events.tsv, line 2", "2 cells", "expected 3"]),
    "events_with_a_column_twice": (
        "01", events("2\t8\t8\tleft", header="onset\tduration\tduration\ttrial_type"),
        ["events.tsv, line 1", "'duration' stands 2 times", "keep one"]),
    "events_in_another_encoding": (
        "01", write("events.tsv", EVENTS.replace("rest", "repos é").encode("latin-1")),
        ["events.tsv", "not text in UTF-8", "save it"]),
    # positions, people
    "electrodes_without_a_system": (
        "01", electrodes("name\tx\ty\tz\nOz\t0\t1\t2\n", None), ["no coordsystem.json", "Add it"]),
    "a_position_that_is_no_number": (
        "01", electrodes("name\tx\ty\tz\nOz\tback\t1\t2\n"), ["electrodes.tsv, line 2", "'back'"]),
    "electrodes_without_a_coordinate": (
        "01", electrodes("name\tx\ty\nOz\t0\t1\n"), ["electrodes.tsv", "no column z", "Add it"]),
    "invalid_coordsystem": (
        "01", electrodes("name\tx\ty\tz\nOz\t0\t1\t2\n", "{"), ["coordsystem.json, line 1"]),
    "coordinates_without_units": (
        "01", electrodes("name\tx\ty\tz\nOz\t0\t1\t2\n", '{"EEGCoordinateSystem": "CapTrak"}'),
        ["coordsystem.json has no EEGCoordinateUnits", "add it"]),
    "coordinates_in_unknown_units": (
        "01", electrodes("name\tx\ty\tz\nOz\t0\t1\t2\n",
                         '{"EEGCoordinateSystem": "CapTrak", "EEGCoordinateUnits": "inch"}'),
        ["EEGCoordinateUnits is 'inch'", "expected one of m, cm, mm", "correct it"]),
    "participants_without_labels": (
        "01", lambda s: (s.root / "participants.tsv").write_text("age\n30\n"),
        ["participants.tsv has no column participant_id", "it has age", "Add it"]),
    "empty_participants": (
        "01", lambda s: (s.root / "participants.tsv").write_text(""),
        ["participants.tsv has no rows", "take the file away"]),
    "scans_without_names": (
        "01", lambda s: (s.root / "sub-01/sub-01_scans.tsv").write_text("acq_time\nn/a\n"),
        ["sub-01_scans.tsv has no column filename", "Add it"]),
    "participants_with_a_ragged_row": (
        "01", lambda s: (s.root / "participants.tsv").write_text("participant_id\tage\nsub-01\n"),
        ["participants.tsv, line 2", "1 cells", "expected 2"]),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_RECORDINGS)
def test_a_recording_that_cannot_be_used(study, capfd, case):
    label, damage, words = BAD_RECORDINGS[case]
    damage(study)
    study = replace(study, label=label)
    assert_refused(study, capfd, lambda: intake(study), f"sub-{label}_task-x, intake: ", *words)


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="root may read every file")
@pytest.mark.parametrize("suffix", ["eeg.eeg", "eeg.json", "events.tsv", "channels.tsv"])
def test_a_file_that_may_not_be_read(study, capfd, suffix):
    study.at(suffix).chmod(0)
    assert_refused(study, capfd, lambda: intake(study), suffix, "Permission denied", "right to")


def test_a_file_that_the_system_does_not_hand_out(study, capfd, monkeypatch):
    """As without the right to read it, also for those who may read everything."""

    def refuse(path, *arguments, **named):
        if str(path).endswith("events.tsv"):
            raise PermissionError(13, "Permission denied", str(path))
        return open(path, *arguments, **named)

    monkeypatch.setattr("onbin.headers.open", refuse, raising=False)
    assert_refused(study, capfd, lambda: intake(study), "events.tsv", "Permission denied", "right")


@pytest.mark.parametrize("name", ["S001R01.edf", "S001R02.edf"])
def test_a_real_file_whose_line_ends_were_changed(study, capfd, name):
    folder = realdata.require(f"eegmmidb-s001/as-found/{name}") / "eegmmidb-s001" / "as-found"
    study = replace(study, label="02")
    shutil.copy(folder / name, study.data)
    words = ("eeg.edf", "line feeds", "as if it were text", "binary mode")
    assert_refused(study, capfd, lambda: intake(study), *words)


def test_a_region_whose_channels_are_not_there(study, capfd):
    regions = SETTINGS["regions"] | {"parietal": ["Pz", "POz", "P3"]}
    assert_refused(
        study, capfd, lambda: plan_flicker(study, regions=regions),
        "regions.parietal: no EEG channel POz, P3 in sub-01_task-x, sub-02_task-x, sub-03_task-x, "
        "only Fp1, Fp2, Fz, Cz, Pz, O1, Oz, O2; change it", step="plan", lines=2,
    )  # fmt: skip


def test_channels_that_some_recordings_lack_are_told_at_once(study, capfd):
    """By region, and by what is there; a channel that recorded eyes is no EEG."""
    only("Fz", "Cz", "Oz")(study)
    regions = {"occipital": ["O1", "Oz"], "front": ["Fp1"], "middle": ["Cz"], "eye": ["HEOG"]}
    assert_refused(
        study, capfd,
        lambda: plan_flicker(study, regions=regions, sensors={"reference": ["TP9", "Fz"]}),
        "regions.occipital: no EEG channel O1 in sub-01_task-x, only Fz, Cz, Oz; change",
        "regions.front: no EEG channel Fp1 in sub-01_task-x, only Fz, Cz, Oz; change",
        "regions.eye: no EEG channel HEOG in sub-01_task-x, only Fz",
        "regions.eye: no EEG channel HEOG in sub-02_task-x, sub-03_task-x, only Fp1",
        "sensors.reference: no EEG channel TP9 in sub-01_task-x, only Fz",
        "sensors.reference: no EEG channel TP9 in sub-02_task-x, sub-03_task-x, only Fp1",
        step="plan", lines=7,
    )  # fmt: skip


def test_channels_of_a_recording_without_a_table_are_those_of_its_header(study, capfd):
    remove("channels.tsv")(study)
    of("02", remove("channels.tsv"))(study)
    assert_refused(
        study, capfd, lambda: plan_flicker(study, regions=SETTINGS["regions"] | {"a": ["TP9"]}),
        "no EEG channel TP9 in sub-01_task-x, sub-02_task-x, only Fp1, Fp2", "O2, HEOG;",
        step="plan", lines=3,
    )  # fmt: skip


@pytest.mark.parametrize(
    "damage",
    [
        pytest.param(channels("Fz\tEEG"), id="table"),
        pytest.param(both(remove("channels.tsv"), write("eeg.vhdr", "")), id="header"),
    ],
)
def test_channels_of_a_damaged_recording_are_left_to_intake(study, damage):
    damage(study)
    assert tables.read_table(plan_flicker(study).output.terms)


def test_a_sound_plan_is_made(study, capfd):
    assert tables.read_table(plan_flicker(study).output.terms)
    assert capfd.readouterr() == ("", "")


def test_a_photodiode_that_is_not_there(study, capfd):
    assert_refused(
        study, capfd, lambda: intake(study, flicker={"photodiode": "LIGHT"}),
        "flicker.photodiode", "no channel LIGHT", "it has Fp1", "Change it",
    )  # fmt: skip


def test_an_event_that_belongs_to_two_conditions(study, capfd):
    conditions = SETTINGS["conditions"] | {"all": {"events": {"duration": 8}}}
    assert_refused(
        study, capfd, lambda: intake(study, conditions=conditions),
        "events.tsv, line 2", "two conditions, all and left", "events of its own",
    )  # fmt: skip


# --- what looks odd and is understood ---


def crlf(suffix):
    return lambda s: s.at(suffix).write_bytes(s.at(suffix).read_bytes().replace(b"\n", b"\r\n"))


def move_up(suffix):
    """Move a sidecar to the top of the dataset, from where it is inherited."""
    return lambda s: s.at(suffix).rename(s.root / f"task-x_{suffix}")


def inherit_line_frequency(study):
    (study.root / "task-x_eeg.json").write_text('{"PowerLineFrequency": 50}')
    tell(PowerLineFrequency=None)(study)


ODD_BUT_SOUND = {
    "untouched": ("01", lambda s: None),
    "edf_untouched": ("02", lambda s: None),
    "bdf_untouched": ("03", lambda s: None),
    "edf_that_was_not_closed": ("02", of("02", patch("eeg.edf", 236, "-1      "))),
    "windows_line_ends_in_events": ("01", crlf("events.tsv")),
    "windows_line_ends_in_channels": ("01", crlf("channels.tsv")),
    "windows_line_ends_in_json": ("01", crlf("eeg.json")),
    "windows_line_ends_in_header": ("01", crlf("eeg.vhdr")),
    "byte_order_mark_in_events": ("01", change("events.tsv", (b"onset", b"\xef\xbb\xbfonset"))),
    "byte_order_mark_in_channels": ("01", change("channels.tsv", (b"name", b"\xef\xbb\xbfname"))),
    "unsorted_events": ("01", events("22\t6\trest", "12\t8\tright", "2\t8\tleft")),
    "blank_lines": ("01", change("events.tsv", ("2\t8\tleft\n", "\n2\t8\tleft\n\n\n"))),
    "quoted_cells": ("01", change("events.tsv", ("left", '"left"'), ("right", '"right"'))),
    "events_of_no_condition_anywhere": (
        "01", change("events.tsv", ("2\t8\tleft", "2\t8\tleft\n3\t1\tblink\n-5\t0\tstart"))),
    "an_end_within_one_sample": ("01", change("events.tsv", ("22\t6", "24.004\t6"))),
    "a_date_of_centuries_ago": (  # as BIDS has dates shifted
        "01", lambda s: (s.root / "sub-01/sub-01_scans.tsv").write_text(
            "filename\tacq_time\neeg/sub-01_task-x_eeg.vhdr\t1800-01-01T00:00:00\n")),
    "a_date_that_is_none": (
        "01", lambda s: (s.root / "sub-01/sub-01_scans.tsv").write_text(
            "filename\tacq_time\neeg/sub-01_task-x_eeg.vhdr\tyesterday\n")),
    "edf_date_that_is_none": ("02", of("02", patch("eeg.edf", 168, "99.99.99"))),
    "an_unrelated_event_without_onset": (
        "01", change("events.tsv", ("2\t8\tleft", "2\t8\tleft\nn/a\t1\tblink"))),
    "columns_in_another_order": (
        "01", events("left\t8\t2", "right\t8\t12", "rest\t6\t22",
                     header="trial_type\tduration\tonset")),
    "channels_in_another_order": ("01", channels(*reversed(all_rows()))),
    "no_channels": ("01", remove("channels.tsv")),
    "channels_without_units": (
        "01", channels(*(f"{name}\tEEG" for name in CHANNELS), header="name\ttype")),
    "types_in_small_letters": ("01", channels(*all_rows("eeg"))),
    "duration_rounded_to_seconds": ("01", tell(RecordingDuration=30.6)),
    "no_duration": ("01", tell(RecordingDuration=None)),
    "more_data_than_was_told": ("01", tell(RecordingDuration=10)),
    "no_hum": ("01", tell(PowerLineFrequency="n/a")),
    "inherited_json": ("01", move_up("eeg.json")),
    "inherited_channels": ("01", move_up("channels.tsv")),
    "inherited_key": ("01", inherit_line_frequency),
    "no_participants": ("01", lambda s: (s.root / "participants.tsv").unlink()),
    "participants_without_this_one": (
        "01", lambda s: (s.root / "participants.tsv").write_text("participant_id\nsub-77\n")),
    "positions_not_given_for_all": (
        "01", electrodes("name\tx\ty\tz\nOz\t0\t-0.09\t0.02\nFz\tn/a\tn/a\tn/a\n")),
}  # fmt: skip


@pytest.mark.parametrize("case", ODD_BUT_SOUND)
def test_a_recording_that_is_understood(study, capfd, case):
    label, damage = ODD_BUT_SOUND[case]
    damage(study)
    job = intake(replace(study, label=label))
    assert capfd.readouterr() == ("", "")
    trials = tables.read_table(job.output.trials)
    assert [trial["condition"] for trial in trials] == ["left", "right", "rest"]
    assert [trial["onset_s"] for trial in trials][:2] == [2, 12]
    rows = tables.read_table(job.output.channels)
    assert sorted(row["name"] for row in rows) == sorted(CHANNELS)
    assert all(row["status"] == "good" for row in rows)


def write_eeglab(study):
    """Turn the BrainVision recording into EEGLAB's MATLAB file and the samples beside it."""
    for suffix in ("eeg.vhdr", "eeg.vmrk", "eeg.eeg"):
        study.at(suffix).unlink()
    samples_uv = digits() * UV_PER_DIGIT
    about = {
        "setname": "x", "nbchan": len(CHANNELS), "trials": 1, "pnts": samples_uv.shape[1],
        "srate": RATE_HZ, "xmin": 0.0, "xmax": DURATION_S, "data": study.at("eeg.fdt").name,
        "chanlocs": np.array([(name,) for name in CHANNELS], dtype=[("labels", object)]),
        "event": [], "epoch": [], "icawinv": [], "icaweights": [], "icasphere": [],
    }  # fmt: skip
    study.at("eeg.fdt").write_bytes(samples_uv.T.astype("<f4").tobytes())
    savemat(study.at("eeg.set"), {"EEG": about}, appendmat=False)


def test_eeglab_is_understood(study):
    write_eeglab(study)
    taken_in = intake(study)
    assert len(tables.read_table(taken_in.output.trials)) == 3
    signal_uv = dataset.eeg_uv(dataset.read_signal(taken_in.output.signal))
    # single precision, in which it is written: 24 bits, of at most 257 µV
    np.testing.assert_allclose(signal_uv, digits()[:-1] * UV_PER_DIGIT, atol=1e-4)


@pytest.mark.parametrize(
    ("damage", "words"),
    [
        pytest.param(cut("eeg.fdt", 0.5), ["eeg.fdt", "eeg.set says 30 s"], id="truncated_samples"),
        pytest.param(remove("eeg.fdt"), ["eeg.set cannot be read"], id="no_samples"),
        pytest.param(cut("eeg.set", 0.5), ["eeg.set cannot be read"], id="truncated_header"),
        pytest.param(write("eeg.set", ""), ["eeg.set is empty"], id="zero_length"),
        pytest.param(write("eeg.set", "text"), ["eeg.set cannot be read"], id="another_file"),
    ],
)
def test_eeglab_that_cannot_be_used(study, capfd, damage, words):
    both(write_eeglab, damage)(study)
    assert_refused(study, capfd, lambda: intake(study), *words, "anew")


def log_of(job):
    return Path(job.log[0]).read_text()


def test_line_frequency_from_the_settings(study):
    tell(PowerLineFrequency=None)(study)
    assert intake(study, filter={"line_hz": 50.0}).output


def test_an_inherited_line_frequency_reaches_the_signal(study):
    inherit_line_frequency(study)
    assert dataset.read_signal(intake(study).output.signal).info["line_freq"] == 50


@pytest.mark.parametrize(
    ("damage", "words"),
    [
        pytest.param(remove("channels.tsv"), "no channels.tsv: types are", id="no_channels"),
        pytest.param(tell(PowerLineFrequency="n/a"), "no mains hum is taken out", id="no_hum"),
        pytest.param(tell(RecordingDuration=10), "has 30 s, RecordingDuration is 10", id="longer"),
        pytest.param(
            electrodes(
                "name\tx\ty\tz\nOz\t0\t1\t2\n",
                '{"EEGCoordinateSystem": "Elsewhere", "EEGCoordinateUnits": "m"}',
            ),
            "no position of electrodes.tsv could be used",
            id="unknown_coordinates",
        ),
    ],
)
def test_what_is_taken_for_granted_is_told_in_the_log(study, damage, words):
    damage(study)
    assert words in log_of(intake(study))


def test_bad_channels_and_types_reach_the_table(study):
    channels(*(row.replace("good", "BAD") if "Oz" in row else row for row in all_rows()))(study)
    rows = {row["name"]: row for row in tables.read_table(intake(study).output.channels)}
    assert [name for name, row in rows.items() if row["status"] == "bad"] == ["Oz"]
    assert rows["HEOG"]["type"] == "EEG"  # as the damaged table says


# --- what shows in a later step ---


def only(*names, rate_hz=RATE_HZ):
    """Make a BrainVision recording of other channels, or of another rate."""

    def damage(study):
        header = study.at("eeg.vhdr").read_text().split("[Channel Infos]")[0]
        header = header.replace(f"Channels={len(CHANNELS)}", f"Channels={len(names)}")
        header = header.replace(f"Interval={1e6 / RATE_HZ:g}", f"Interval={1e6 / rate_hz:g}")
        listed = [f"Ch{i}={name},,{UV_PER_DIGIT},µV" for i, name in enumerate(names, start=1)]
        study.at("eeg.vhdr").write_text("\n".join([header, "[Channel Infos]", *listed]))
        samples = digits()[: len(names), : 30 * RATE_HZ]
        study.at("eeg.eeg").write_bytes(samples.T.astype("<i2").tobytes())
        channels(*(f"{name}\tEEG\tµV\tgood" for name in names))(study)
        tell(SamplingFrequency=rate_hz, RecordingDuration=DURATION_S * RATE_HZ / rate_hz)(study)

    return damage


def second_run(study):
    """Copy the recording as a second run of the same person."""
    run = replace(study, run="_run-2")
    for suffix in ("eeg.vhdr", "eeg.vmrk", "eeg.eeg", "eeg.json", "events.tsv", "channels.tsv"):
        shutil.copy(study.at(suffix), run.at(suffix))
    for suffix in ("eeg.vhdr", "eeg.vmrk"):
        text = run.at(suffix).read_text().replace("task-x_eeg", "task-x_run-2_eeg")
        run.at(suffix).write_text(text)
    return run


ALIKE = {"regions": {"occipital": ["A1", "A2"]}}


def test_all_channels_bad(study, capfd):
    change("channels.tsv", *(("\tgood", "\tbad"),) * len(CHANNELS))(study)
    taken_in = intake(study)
    assert_refused(
        study, capfd, lambda: judge_sensors(study, taken_in),
        "sensors: 8 of 8 channels are bad", "0 good ones", "leave the recording out",
        step="desc-sensors",
    )  # fmt: skip


def test_one_channel_has_no_average(study, capfd):
    only("Oz")(study)
    taken_in = intake(study)
    assert_refused(
        study, capfd, lambda: judge_sensors(study, taken_in),
        "sensors.reference", "average", "Oz alone", "as_recorded", step="desc-sensors",
    )  # fmt: skip


def test_one_channel_alone_goes_through(study):
    only("Oz")(study)
    changes = {"regions": {"occipital": ["Oz"]}, "sensors": {"reference": "as_recorded"}}
    judged = judge_sensors(study, intake(study, **changes), **changes)
    assert [r["verdict"] for r in tables.read_table(judged.output.verdicts)] == ["good"]
    inputs = {"signal": judged.output.signal, "sensors": judged.output.verdicts}
    own = {"recording": Path(study.name).name}
    separated = run_step(study, "components", components_step.separate, inputs, own=own, **changes)
    assert tables.read_table(separated.output.evidence) == []
    assert arrays.read(separated.output.ica)["maps"].shape[1] == 0
    assert "too few to separate" in log_of(separated)


def test_channels_without_positions_go_through(study):
    only(*(f"A{n}" for n in range(1, 9)))(study)
    taken_in = intake(study, **ALIKE)
    assert {r["position"] for r in tables.read_table(taken_in.output.channels)} == {"none"}
    assert "no position for A1, A2" in log_of(taken_in)
    judged = judge_sensors(study, taken_in, **ALIKE)
    assert {r["verdict"] for r in tables.read_table(judged.output.verdicts)} == {"good"}


def test_a_bad_channel_without_a_position_is_left_out_and_named(study):
    only(*(f"A{n}" for n in range(1, 9)))(study)
    change("channels.tsv", ("A3\tEEG\tµV\tgood", "A3\tEEG\tµV\tbad"))(study)
    judged = judge_sensors(study, intake(study, **ALIKE), **ALIKE)
    assert "A3 left out: bad, and without a position" in log_of(judged)
    assert "A3" not in dataset.read_signal(judged.output.signal).ch_names


def test_runs_of_one_person_with_different_rates(study, capfd):
    runs = [study, second_run(study)]
    only("Fz", "Cz", "O1", "Oz", "O2", rate_hz=250)(runs[1])
    events("2\t8\tleft", "12\t8\tright")(runs[1])
    inputs = {"signals": [intake(run).output.signal for run in runs], "verdicts": [], "flicker": []}
    own = {"recordings": [run.name for run in runs]}
    assert_refused(
        study, capfd,
        lambda: run_step(
            study, "spectra", spectra_step.measure_spectra, inputs, "measures", own
        ),
        "different working rates", "sub-01_task-x: 200 Hz", "run-2: 250 Hz",
        "intake.working_rate_hz", step="desc-terms",
    )  # fmt: skip
    assert_refused(  # the plan tells it before anything is read
        study, capfd, lambda: plan_flicker(study),
        "different working rates", "sub-01_task-x: 200 Hz", "run-2: 250 Hz", step="plan",
    )  # fmt: skip
    tell(SamplingFrequency=400)(runs[1])  # which leaves 200 Hz
    assert plan_flicker(study, intake={"working_rate_hz": 200.0}).output


def test_runs_of_one_person_with_different_names(study, capfd):
    """A name in other letters is another channel."""
    only("FZ", "CZ", "PZ", "O1", "OZ", "O2")(second_run(study))
    assert_refused(
        study, capfd, lambda: plan_flicker(study),
        "regions.occipital: no EEG channel Oz in sub-01_task-x_run-2, only FZ, CZ, PZ, O1, OZ, O2;",
        step="plan", lines=2,
    )  # fmt: skip


# --- datasets ---


def as_file(path):
    def damage(study):
        if (study.root / path).is_dir():
            shutil.rmtree(study.root / path)
        (study.root / path).write_text("a file")

    return damage


def also(path):
    def damage(study):
        (study.root / path).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(study.at("eeg.vhdr"), study.root / path)

    return damage


def loop(study):
    (study.root / "sub-08").symlink_to("sub-09")
    (study.root / "sub-09").symlink_to("sub-08")


BAD_DATASETS = {
    "no_description": (
        lambda s: (s.root / "dataset_description.json").unlink(),
        ["no dataset_description.json", "BIDS requires", "write one"]),
    "no_recording": (
        lambda s: [shutil.rmtree(s.root / f"sub-{label}") for label in FORMATS],
        ["no EEG recording", "expected files such as"]),
    "folder_is_a_file": (
        lambda s: (shutil.rmtree(s.root), s.root.write_text("")), ["bids is a file", "give the"]),
    "folder_does_not_exist": (lambda s: shutil.rmtree(s.root), ["does not exist", "give the"]),
    "participant_is_a_file": (as_file("sub-01"), ["sub-01 is a file", "expected a folder"]),
    "session_is_a_file": (as_file("sub-01/ses-1"), ["ses-1 is a file", "expected a folder"]),
    "eeg_is_a_file": (as_file("sub-01/eeg"), ["sub-01/eeg is a file", "expected a folder"]),
    "a_loop_of_links": (loop, ["sub-08 is a link that leads nowhere", "remove it"]),
    "content_not_fetched": (
        link("eeg.eeg", ANNEX),
        ["sub-01_task-x_eeg.eeg", "content was not fetched", "datalad get", "git annex get"]),
    "content_of_a_sidecar_not_fetched": (
        link("events.tsv", ANNEX), ["sub-01_task-x_events.tsv", "not fetched", "datalad get"]),
    "a_link_to_nothing": (
        link("eeg.eeg", "/no/such/disk/a.eeg"),
        ["eeg.eeg", "a link to /no/such/disk/a.eeg", "Put the file there"]),
    "two_formats": (
        lambda s: shutil.copy(s.at("eeg.vhdr"), s.at("eeg.set")),
        ["sub-01_task-x_eeg", ".set and .vhdr", "keep one"]),
    "a_name_with_a_space": (rename("sub-01", "sub-0 1"), ["sub-0 1", "letters and digits"]),
    "a_name_with_an_accent": (rename("sub-01", "sub-é1"), ["sub-é1", "letters and digits"]),
    "a_name_with_a_sign": (rename("sub-01", "sub-a.b"), ["sub-a.b", "letters and digits"]),
    "a_label_with_a_hyphen": (rename("task-x", "task-x-y"), ["task-x-y", "letters and digits"]),
    "no_task": (rename("_task-x", ""), ["sub-01_eeg", "there is no task-", "Rename"]),
    "an_unknown_entity": (
        rename("task-x", "task-x_visit-2"), ["visit- is not known", "sub-, ses-, task-"]),
    "a_name_from_another_folder": (
        also("sub-01/eeg/sub-02_task-x_eeg.vhdr"), ["sub-02_task-x_eeg", "not those of its"]),
    "a_very_long_name": (
        rename("task-x", f"task-{'x' * 150}"), ["162 characters", "at most 140", "Rename"]),
    "two_people_who_differ_by_case": (
        both(also("sub-a1/eeg/sub-a1_task-x_eeg.vhdr"), also("sub-A1/eeg/sub-A1_task-x_eeg.vhdr")),
        ["sub-A1", "sub-a1", "capital letters only", "rename one"]),
    "two_tasks_that_differ_by_case": (
        also("sub-01/eeg/sub-01_task-X_eeg.vhdr"), ["task-X", "task-x", "capital letters only"]),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_DATASETS)
def test_a_dataset_that_cannot_be_used(study, case):
    damage, words = BAD_DATASETS[case]
    damage(study)
    with pytest.raises(OnbinError) as caught:
        layout.check_files(layout.find_recordings(study.root))
    assert_plain(str(caught.value), str(study.root.parent) if "bids" in words[0] else "", *words)


@pytest.mark.parametrize(
    ("choice", "words"),
    [
        pytest.param({"tasks": ["y"]}, ["dataset.tasks", "task y", "there are x"], id="task"),
        pytest.param(
            {"participants": ["sub-01"]},
            ["dataset.participants", "no sub-sub-01", "it has sub-01", "without sub-"],
            id="label_with_its_prefix",
        ),
    ],
)
def test_a_choice_of_what_is_not_there(study, choice, words):
    with pytest.raises(SettingsError) as caught:
        layout.find_recordings(study.root, **choice)
    assert_plain(str(caught.value), *words)


def test_a_folder_that_may_not_be_listed(study, monkeypatch):
    def refuse(path):
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(os, "listdir", refuse)
    with pytest.raises(SettingsError) as caught:
        layout.find_recordings(study.root)
    assert_plain(str(caught.value), "cannot be listed", "ask for the right")


IGNORED = {
    "derivatives": also("derivatives/cleaned/sub-01/eeg/sub-01_task-x_eeg.vhdr"),
    "sourcedata": also("sourcedata/sub-01/eeg/sub-01_task-x_eeg.edf"),
    "a_hidden_folder": also(".trash/sub-01/eeg/sub-01_task-x_eeg.vhdr"),
    "another_modality": also("sub-01/beh/sub-01_task-x_beh.tsv"),
    "a_person_without_eeg": lambda s: (s.root / "sub-04" / "anat").mkdir(parents=True),
    "a_row_without_a_folder": lambda s: (s.root / "participants.tsv").write_text(
        "participant_id\nsub-01\nsub-02\nsub-03\nsub-99\n"
    ),
    "a_folder_without_a_row": lambda s: (s.root / "participants.tsv").write_text(
        "participant_id\nsub-01\n"
    ),
    "notes_beside_people": lambda s: (s.root / "sub-01_notes.txt").write_text("left-handed"),
    "files_of_other_programs": lambda s: (s.root / "sub-01/eeg/.DS_Store").write_text("x"),
}


@pytest.mark.parametrize("case", IGNORED)
def test_what_is_no_recording_is_passed_over(study, case):
    IGNORED[case](study)
    names = [recording.name for recording in layout.find_recordings(study.root)]
    assert names == [f"sub-{label}/eeg/sub-{label}_task-x" for label in FORMATS]


def test_a_dataset_whose_path_has_spaces_and_accents(study, capfd):
    moved = study.root.parent / "Études de la lumière 2"
    study.root.rename(moved)
    assert intake(replace(study, root=moved)).output
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize(
    ("results", "words"),
    [
        pytest.param("bids/results", ["lies in the dataset", "Choose"], id="in_the_dataset"),
        pytest.param("bids", ["lies in the dataset", "Choose"], id="is_the_dataset"),
        pytest.param(".", ["holds the dataset", "Choose"], id="around_the_dataset"),
        pytest.param("file/results", ["file is a file", "Choose"], id="through_a_file"),
        pytest.param("loop/results", ["leads back to itself", "Choose"], id="through_a_loop"),
    ],
)
def test_results_that_cannot_be_written_there(study, results, words):
    folder = study.root.parent
    (folder / "file").write_text("")
    (folder / "loop").symlink_to("loop")
    with pytest.raises(SettingsError) as caught:
        layout.check_results(folder / results, study.root)
    assert_plain(str(caught.value), "dataset.results", *words)


# --- settings ---


def laughs(join):
    """Nine aliases of nine aliases of ... (the "billion laughs" of XML, in YAML)."""
    lines = ["a0: &a0 {x: 1}"]
    lines += [f"a{i}: &a{i} {join(', '.join([f'*a{i - 1}'] * 9))}" for i in range(1, 10)]
    return "\n".join(lines) + "\n"


def text_of(**changes):
    raw = {**SETTINGS, "dataset": {"folder": "bids"}}
    for key, value in changes.items():
        section, _, name = key.partition("__")
        raw[section] = {**raw.get(section, {}), name: value} if name else value
    return yaml.safe_dump(raw, sort_keys=False, allow_unicode=True)


BAD_SETTINGS = {
    "a_key_twice": ("seed: 1\nseed: 2\n", ["line 2", "'seed' stands twice", "keep one"]),
    "a_key_twice_deep_down": (
        "study:\n  title: a\n  title: b\n", ["line 3", "'title' stands twice", "keep one"]),
    "tabs": ("study:\n\ttitle: a\n", ["line 2, column 1", "Use spaces, not tabs"]),
    "empty": ("", ["holds nothing", "key: value", "config/config.yaml"]),
    "remarks_alone": ("# later\n", ["holds nothing", "key: value"]),
    "a_list": ("- a\n- b\n", ["holds ['a', 'b']", "key: value"]),
    "a_word": ("hello\n", ["holds 'hello'", "key: value"]),
    "two_documents": ("seed: 1\n---\nseed: 2\n", ["line 2", "another document", "correct"]),
    "an_open_quote": ('study: {title: "x}\n', ["line 2", "end of stream", "correct"]),
    "an_unknown_alias": ("study: *it\n", ["line 1", "undefined alias 'it'", "correct"]),
    "an_anchor_twice": ("a: &x 1\nb: &x 2\n", ["line 2", "duplicate anchor 'x'", "correct"]),
    "an_alias_of_itself": ("study: &x [*x]\n", ["alias (*name)", "write it out"]),
    "billion_laughs": (laughs("[{}]".format), ["more than 20000 entries", "write out"]),
    "billion_laughs_by_merging": (
        laughs("{{<<: [{}]}}".format), ["more than 20000 entries", "write out"]),
    "nested_deeply": ("a: " + "[" * 400 + "]" * 400, ["nested too deeply"]),
    "a_tag_that_runs_code": (
        "study: !!python/object/apply:os.system [ls]\n", ["line 1", "no meaning here", "remove"]),
    "no_utf_8": ("study: {title: \xe9}\n".encode("latin-1"), ["not text in UTF-8", "save it"]),
    "utf_16": ("seed: 1\n".encode("utf-16"), ["not text in UTF-8", "save it"]),
    "a_control_character": ("seed: \0\n", ["#x0000", "remove it"]),
    "a_date_that_is_none": ("seed: 2026-13-45\n", ["month", "quotation marks"]),
    "an_unknown_key": (text_of(sead=3), ["sead", "is not a setting", "did you mean seed"]),
    "an_unknown_key_deep_down": (
        text_of(windows__lenght_s=3), ["windows.lenght_s", "did you mean length_s"]),
    "a_key_that_is_a_number": (text_of() + "7: 8\n", ["line 37, 7", "not a setting", "found 7"]),
    "a_list_for_a_mapping": (text_of(study=["a"]), ["study", "key: value", "found ['a']"]),
    "a_word_for_a_list": (text_of(regions={"o": "Oz"}), ["regions.o", "a list", "found 'Oz'"]),
    "a_word_for_a_number": (text_of(windows__length_s="two"), ["must be a number", "'two'"]),
    "a_number_in_quotes": (text_of(windows__length_s="2"), ["must be a number", "found '2'"]),
    "a_truth_for_a_number": (text_of(windows__skip_s=True), ["must be a number", "found true"]),
    "nothing_for_a_number": (text_of(seed=None), ["seed", "whole number", "found nothing"]),
    "a_fraction_for_a_count": (text_of(response__harmonics=2.5), ["whole number", "2.5"]),
    "a_label_as_a_number": (
        text_of(dataset={"folder": "b", "participants": [1]}), ["must be text", "quotation marks"]),
    "not_a_number": (text_of(windows__length_s=float("nan")), ["finite number", "found nan"]),
    "infinity": (text_of(filter__highpass_hz=float("inf")), ["finite number", "found inf"]),
    "infinity_as_a_ratio": (text_of(display__refresh_hz=float("inf")), ["refresh_hz", "inf"]),
    "a_huge_number": (text_of(windows__length_s=1e308), ["less than or equal to 1000000"]),
    "a_huge_count": (text_of(response__harmonics=10**40), ["harmonics", "equal to 100"]),
    "a_huge_order": (text_of(response__intermodulation_order=10**40), ["order", "equal to 20"]),
    "huge_permutations": (
        text_of(relation={"response_region": "occipital", "permutations": 10**40}),
        ["permutations", "equal to 1000000"]),
    "a_huge_seed": (text_of(seed=10**40), ["seed", "less than 4294967296"]),
    "a_huge_exponent": (
        text_of(tags={"panel": {"frequency_hz": "1e999999999"}}), ["positive number or ratio"]),
    "a_ratio_with_zero": (
        text_of(tags={"panel": {"frequency_hz": "120/0"}}), ["positive number or ratio", "120/0"]),
    "an_endless_text": (text_of(seed="x" * 99999), ["whole number", "xxx..."]),
    "a_missing_part": (text_of().replace("windows:", "windws:"), ["windows: is required; add it"]),
    "a_name_that_is_none": (
        text_of(regions={"Occipital lobe": ["Oz"]}), ["lower-case letters", "Occipital lobe"]),
    "a_region_that_is_none": (text_of(alpha__region="ocipital"), ["did you mean occipital?"]),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_SETTINGS)
def test_settings_that_cannot_be_used(tmp_path, case):
    text, words = BAD_SETTINGS[case]
    path = tmp_path / "study.yaml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(SettingsError) as caught:
        load_settings(path)
    assert_plain(str(caught.value), str(path), *words)
    assert len(str(caught.value)) < 2000


def test_settings_that_are_no_file(tmp_path):
    for path, words in (("none.yaml", "no such"), (".", "is a folder"), ("x" * 300, "too long")):
        with pytest.raises(SettingsError) as caught:
            load_settings(tmp_path / path)
        assert_plain(str(caught.value), words)


@pytest.mark.parametrize(
    "text",
    [
        pytest.param("\ufeff" + text_of(), id="byte_order_mark"),
        pytest.param(text_of().replace("\n", "\r\n"), id="windows_line_ends"),
        pytest.param(text_of().replace("title: Small", "title: Été №2"), id="accents"),
        pytest.param(
            text_of().replace("  rest:\n", "  rest:\n    <<: &own {phase_locked: true}\n"),
            id="a_merged_mapping",
        ),
    ],
)
def test_settings_that_are_understood(tmp_path, text):
    (tmp_path / "study.yaml").write_bytes(text.encode())
    settings = load_settings(tmp_path / "study.yaml")
    assert list(settings.conditions) == ["left", "right", "rest"]
