"""Every file tells what it was made from, by content, and with what."""

import hashlib
import json
from importlib import metadata

import pytest
from onbin import __version__, provenance

# SHA-256 of "abc": FIPS 180-2, appendix B.1
ABC = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


@pytest.fixture
def made(tmp_path):
    path = tmp_path / "sub-1_desc-x_eeg.fif"
    path.write_bytes(b"abc")
    return path


def test_sha256_of_published_vector_and_of_a_long_file(made, monkeypatch):
    assert provenance.sha256(made) == ABC
    monkeypatch.setattr(provenance, "CHUNK", 7)
    made.write_bytes(bytes(range(100)))
    assert provenance.sha256(made) == hashlib.sha256(bytes(range(100))).hexdigest()


def test_content_hash_is_the_one_noted_beside_a_file_of_ours(made):
    made.with_suffix(".json").write_text('{"Provenance": {"sha256": "noted"}}')
    assert provenance.content_hash(made) == "noted"


@pytest.mark.parametrize(
    "beside",
    [
        '{"SamplingFrequency": 512}',
        '{"Provenance": "our lab"}',
        '{"Provenance": {"step": "x"}}',
        '["Provenance"]',
        "{",
        "µ".encode("latin-1"),
    ],
)
def test_content_hash_beside_a_strangers_json(made, beside):
    text = beside if isinstance(beside, bytes) else beside.encode()
    made.with_suffix(".json").write_bytes(text)
    assert provenance.content_hash(made) == ABC


def test_what_a_dataset_notes_beside_a_recording_is_not_believed(tmp_path):
    path = tmp_path / "sub-1_task-x_eeg.edf"
    path.write_bytes(b"abc")
    path.with_suffix(".json").write_text('{"Provenance": {"sha256": "forged"}}')
    assert provenance.content_hash(path) == ABC


def test_content_hash_of_a_json_itself(tmp_path):
    path = tmp_path / "task-x_eeg.json"
    path.write_bytes(b'{"Provenance": {"sha256": "noted"}}')
    assert provenance.content_hash(path) == hashlib.sha256(path.read_bytes()).hexdigest()


def test_sidecar(made, tmp_path):
    before, raw = tmp_path / "sub-1_desc-y.npz", tmp_path / "raw.edf"
    before.write_bytes(b"1")
    before.with_suffix(".json").write_text('{"Provenance": {"sha256": "noted"}}')
    raw.write_bytes(b"abc")
    settings = {"filter": {"highpass_hz": 0.1}, "title": "flicker in µV"}
    arguments = (made, "filter", [raw, before], settings, {"Description": "d"})
    text = provenance.make_sidecar(*arguments)
    assert text == provenance.make_sidecar(*arguments)
    assert "µV" in text
    sidecar = json.loads(text)
    noted = sidecar["Provenance"]
    assert sidecar["Description"] == "d"
    assert (noted["step"], noted["sha256"], noted["settings"]) == ("filter", ABC, settings)
    assert noted["inputs"] == {str(before): "noted", str(raw): ABC}
    assert noted["versions"]["onbin"] == __version__
    assert noted["versions"]["mne"] == metadata.version("mne")


def test_dataset_description_is_that_of_a_derivative():
    """BIDS 1.10, dataset_description.json: what a derivative must have."""
    described = provenance.dataset_description("Panels", "demo_bids")
    assert described["Name"].startswith("Panels")
    assert described["BIDSVersion"]
    assert described["DatasetType"] == "derivative"
    assert [by["Name"] for by in described["GeneratedBy"]] == ["onbin"]
    assert described["SourceDatasets"] == [{"URL": "demo_bids"}]
    readme = provenance.results_readme("Panels")
    assert readme.startswith("Panels")
    assert "no diagnosis" in readme


def test_manifest_row(made, tmp_path):
    made.with_suffix(".json").write_text(
        '{"Provenance": {"sha256": "noted", "step": "filter", "inputs": {"a": "1", "b": "2"}}}'
    )
    # the manifest is for checking files, so it hashes them anew
    assert provenance.manifest_row(made, tmp_path) == {
        "file": made.name,
        "step": "filter",
        "bytes": 3,
        "sha256": ABC,
        "inputs": "a b",
    }
    readme = tmp_path / "README"
    readme.write_bytes(b"abc")
    row = provenance.manifest_row(readme, tmp_path)
    assert (row["step"], row["inputs"]) == ("describe", None)
