"""Whatever is fed to the readers ends well or with a plain message, soon and in little memory.

Each case draws from a fixed sequence, so that two runs try the same. The long run tries more.
"""

import json
import math
import os
import subprocess
import sys
import tempfile
from pathlib import Path

import fuzzing
import hypothesis
import plan as plan_step
import pytest
import realdata
import yaml
from hypothesis import strategies as st
from onbin import dataset, decisions, layout, plan, plan_page, tables
from onbin.settings import load_settings, part
from workflow import DEMO_SETTINGS

HERE = Path(__file__).parent
DEMO = yaml.safe_load(DEMO_SETTINGS.read_text(encoding="utf-8"))


def cases(few, many):
    """How many cases the usual run tries, and how many the long one."""
    long = pytest.param(many, marks=pytest.mark.long)
    return pytest.mark.parametrize("count", [few, long], ids=["usual", "long"])


def fuzz(count, check, *strategies):
    """Call a check with what the strategies draw, so many times."""
    decorated = hypothesis.given(*strategies)(check)
    hypothesis.settings(
        max_examples=count,
        derandomize=True,
        database=None,
        deadline=None,  # `fuzzing.limited` bounds the time of what is tested
        suppress_health_check=list(hypothesis.HealthCheck),
    )(decorated)()


# --- settings -------------------------------------------------------------------------------------

WORDS = st.sampled_from(
    [
        "", "~", "1e999999999", "1/0", "120/7", "-1", "inf", "nan", "=1+1", "../..", "/", "~/out",
        "{recording}", "a\nb", "\0", "\ud800", "$(touch x)", "left_panel", "occipital", "rest_open",
        "average", "trial_type", "frequency_hz", "x" * 5000,
    ]
)  # fmt: skip
NUMBERS = st.sampled_from(
    [0, 1, 2, -1, 3, 10**9, 10**30, 10**400, 0.1, 1e-300, 1e300, math.inf, math.nan]
)
FACTORS = (2, 3, 10, 1000, 0.5, 0.9, 1.1, 0.001, -1)
SCALARS = st.one_of(
    st.none(), st.booleans(), st.integers(), st.floats(), st.text(), st.dates(), WORDS, NUMBERS
)
TREES = st.recursive(
    SCALARS,
    lambda inner: st.one_of(
        st.lists(inner, max_size=4), st.dictionaries(st.one_of(st.text(), WORDS), inner, max_size=4)
    ),
    max_leaves=12,
)


def places(tree, path=()):
    """Key paths of all that a tree holds."""
    inside = tree.items() if isinstance(tree, dict) else enumerate(tree)
    for key, value in inside:
        yield (*path, key)
        if isinstance(value, dict | list):
            yield from places(value, (*path, key))


def at(tree, path):
    for key in path:
        tree = tree[key]
    return tree


def numbers(tree):
    """Key paths of all numbers that a tree holds and that can be multiplied, and the numbers."""
    for path in places(tree):
        value = at(tree, path)
        is_number = isinstance(value, int | float) and not isinstance(value, bool)
        if is_number and abs(value) < 1e300:
            yield path, value


@st.composite
def changed_settings(draw):
    """The demo's settings with values scaled, replaced, taken away, added and put elsewhere."""
    raw = yaml.safe_load(DEMO_SETTINGS.read_text(encoding="utf-8"))
    for _ in range(draw(st.integers(1, 4))):
        *parent, key = draw(st.sampled_from(list(places(raw))))
        holder = at(raw, parent)
        moved = at(DEMO, draw(st.sampled_from(list(places(DEMO)))))
        value = draw(st.one_of(SCALARS, TREES, st.just(moved)))
        match draw(st.sampled_from(["scale", "scale", "replace", "replace", "delete", "add"])):
            case "scale":  # so that some stay valid
                (*parent, key), number = draw(st.sampled_from(list(numbers(raw))))
                at(raw, parent)[key] = number * draw(st.sampled_from(FACTORS))
            case "replace":
                holder[key] = value
            case "delete":
                del holder[key]
            case "add" if isinstance(holder, list):
                holder.insert(key, value)
            case "add":
                holder[draw(st.one_of(st.text(), WORDS, st.sampled_from(list(DEMO))))] = value
    return raw


def _as_yaml(tree):
    return yaml.safe_dump(tree, allow_unicode=False)


def read_settings(text):
    """Read settings and, where they are accepted, hand them on as the rules do."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "study.yaml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())

        def load_and_plan():
            settings = load_settings(path)
            own = part(settings, *plan.SETTINGS)
            recorded = [plan.Recorded(256.0, 50.0, 144.0, 0.6, (0.5, 0.3))]
            plans = {
                setup: plan.planned_terms(own, setup)
                for setup in plan.setups(own, recorded)
                if not list(plan.blocking(own, setup))
            }
            if plans:
                plan_page.page(own, recorded, plans).encode()
            repr(part(settings, *type(settings).model_fields, "terms", "planned")).encode()

        return fuzzing.outcome(load_and_plan)


@cases(50, 600)
def test_changed_settings(count):
    told = []

    def check(raw):
        told.append(read_settings(_as_yaml(raw))[1])

    fuzz(count, check, changed_settings())
    assert None in told, "no case was valid, so nothing beyond the model was tried"
    assert any(told)


@cases(20, 200)
def test_any_yaml_tree(count):
    def check(tree):
        read_settings(_as_yaml(tree))

    fuzz(count, check, TREES)


@cases(20, 200)
def test_settings_with_damaged_text(count):
    text = DEMO_SETTINGS.read_bytes()
    piece = st.one_of(
        st.binary(max_size=8),
        st.sampled_from([b"&a ", b"*a", b"<<: ", b"!!bool x", b"[", b"{", b"\t", b"---\n", b"? "]),
    )

    def check(start, length, put_in):
        read_settings(text[:start] + put_in + text[start + length :])

    fuzz(count, check, st.integers(0, len(text)), st.integers(0, 40), piece)


@pytest.mark.parametrize(
    "text",
    [
        "a0: &a0 [x, x]\n"
        + "".join(f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 9)}]\n" for i in range(1, 12)),
        "a: &a [*a]\n",
        "a: " + "[" * 3000 + "]" * 3000,
        "a: !!bool x\n",
        "a: !!timestamp x\n",
        "a: !!int ''\n",
        "a: 2001-02-31\n",
        "a: 0x" + "f" * 20_000 + "\n",
        "tags: {x: {frequency_hz: 1e999999999}}\n",
        "study: {title: '" + "x" * 2_000_000 + "'}\n",
    ],
    ids=["names itself", "is in itself", "deep", "bool", "time", "int", "date", "long", "exponent",
         "large"],
)  # fmt: skip
def test_settings_that_once_ran_on_or_broke(text):
    assert read_settings(text)[1]


# --- text of a dataset ----------------------------------------------------------------------------

CELLS = st.one_of(
    st.text(max_size=6),
    st.sampled_from(["onset", "duration", "trial_type", "value", "n/a", "left", "1", "1.5", "-1"]),
    st.sampled_from(["nan", "inf", "1e400", "1_0", "٣", "=1", '"', "0x1", "\ufeff", "\0"]),
)
TABLES = st.one_of(
    st.lists(st.lists(CELLS, max_size=5).map("\t".join), max_size=6).map(
        lambda lines: "\n".join(lines).encode("utf-8", "surrogatepass")
    ),
    st.lists(st.tuples(CELLS, CELLS, CELLS).map("\t".join), max_size=6).map(
        lambda lines: "\n".join(["onset\tduration\ttrial_type", *lines]).encode()
    ),
    st.lists(st.lists(CELLS, min_size=7, max_size=7).map("\t".join), max_size=4).map(
        lambda lines: "\n".join(["\t".join(decisions.HEADER), *lines]).encode()
    ),
    st.binary(max_size=80),
)
CONDITIONS = {
    "left": {"events": {"trial_type": "left"}, "duration_s": None},
    "code": {"events": {"value": 1}, "duration_s": 2.0},
    "all": {"events": {"onset": 1.5, "task": "x"}, "duration_s": None},
}


@cases(60, 400)
def test_tables_and_events(count):
    def check(text):
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "sub-01_task-x_events.tsv"
            path.write_bytes(text)
            rows, _ = fuzzing.outcome(tables.read_foreign, path)
            assert rows is None or all(isinstance(cell, str) for row in rows for cell in row)
            fuzzing.outcome(decisions.read, path, ["sub-01_task-x"])
            fuzzing.outcome(dataset.check_events, path)
            trials, _ = fuzzing.outcome(
                dataset.read_trials,
                path,
                CONDITIONS,
                {"task": "x"},
                recording_s=60.0,
                rate_hz=200.0,
            )
            for trial in trials or ():
                assert math.isfinite(trial["onset_s"])
                assert math.isfinite(trial["duration_s"])

    fuzz(count, check, TABLES)


JSON_VALUES = st.recursive(
    st.one_of(
        st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=4),
        st.sampled_from([10**400, -1, 0, 1e-300, 1e300, 60, 144]),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=3), inner, max_size=3)
    ),
    max_leaves=6,
)  # fmt: skip
SCREENS = st.dictionaries(
    st.sampled_from(["ScreenRefreshRate", "ScreenDistance", "ScreenSize"]), JSON_VALUES
)
SIDECARS = st.one_of(
    st.dictionaries(
        st.sampled_from(["SamplingFrequency", "PowerLineFrequency", "StimulusPresentation"]),
        st.one_of(JSON_VALUES, SCREENS),
    ).map(lambda tree: json.dumps(tree).encode()),
    JSON_VALUES.map(lambda tree: json.dumps(tree).encode()),
    st.binary(max_size=40),
)


@cases(30, 200)
def test_sidecars(count):
    def check(of_eeg, of_events):
        with tempfile.TemporaryDirectory() as folder:
            files = [str(Path(folder) / f"sub-01_task-x_{kind}.json") for kind in ("eeg", "events")]
            for path, text in zip(files, (of_eeg, of_events), strict=True):
                Path(path).write_bytes(text)
            recorded, _ = fuzzing.outcome(plan_step.read_metadata, files)
            if recorded:
                own = part(load_settings(DEMO_SETTINGS), *plan.SETTINGS)
                fuzzing.outcome(plan.setups, own, [recorded])

    fuzz(count, check, SIDECARS, SIDECARS)


# --- folders --------------------------------------------------------------------------------------

NAMES = st.one_of(
    st.sampled_from(["sub-01", "sub-02", "sub-", "sub-0 1", "sub-$(x)", "ses-1", "ses-", "eeg"]),
    st.sampled_from(
        [
            "sub-01_task-x_eeg.edf", "sub-02_task-x_eeg.edf", "_eeg.edf", "eeg.edf", "x_eeg.bdf",
            "sub-01_task-x_eeg.set", "sub-01_ses-1_task-x_run-1_eeg.vhdr", "sub-01_eeg.edf",
            "sub-01_task-x-y_eeg.edf", "sub-01_task-x_task-y_eeg.edf", "sub-01_task-x_events.tsv",
            "eeg.json", "events.tsv", "sub-01_space-{a}_electrodes.tsv",
        ]
    ),
    st.text(min_size=1, max_size=12).filter(
        lambda name: "/" not in name and "\0" not in name and name not in (".", "..")
    ),
)  # fmt: skip
ENTRIES = st.lists(
    st.tuples(
        st.one_of(
            st.lists(NAMES, min_size=1, max_size=4),
            st.tuples(st.just("sub-01"), st.just("eeg"), NAMES),
            st.tuples(st.just("sub-01"), st.just("ses-1"), st.just("eeg"), NAMES),
        ),
        st.sampled_from(["file", "file", "folder", "link up", "link to itself", "link to nothing"]),
    ),
    max_size=8,
)


def _make(root, parts, kind):
    path = root.joinpath(*parts)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        match kind:
            case "file":
                path.touch()
            case "folder":
                path.mkdir()
            case "link up":
                path.symlink_to(root.parent)
            case "link to itself":
                path.symlink_to(path)
            case "link to nothing":
                path.symlink_to(root / "nowhere")
    except (OSError, UnicodeEncodeError):
        return  # what stands there is of another kind already, or the name is none


@cases(40, 300)
def test_folders(count):
    found_any = []

    def check(sound, entries, tasks, participants):
        with tempfile.TemporaryDirectory() as folder:
            root = Path(folder) / "data"
            root.mkdir()
            (root / "dataset_description.json").touch()
            for parts, kind in [*sound, *entries]:
                _make(root, parts, kind)
            found, _ = fuzzing.outcome(layout.find_recordings, root, tasks, participants)
            fuzzing.outcome(layout.check_files, found or ())
            for recording in found or ():
                found_any.append(recording)
                inside = layout.result("results", "intake_signal").format(recording=recording.name)
                assert inside.startswith("results/sub-")
                assert ".." not in inside
                assert recording.participant == f"sub-{recording.entities['sub']}"
                assert all(os.path.lexists(file) for file in recording.files)

    sound = st.sampled_from([[], [(("sub-01", "eeg", "sub-01_task-x_eeg.edf"), "file")]])
    some = st.sampled_from([[], [], [], ["x"], ["01"], [".."], ["*"]])
    fuzz(count, check, sound, ENTRIES, some, some)
    assert found_any, "no case had a recording"


PATHS = st.one_of(
    st.text(st.characters(exclude_characters="\0", exclude_categories=("Cs",)), max_size=8),
    st.lists(NAMES, max_size=4).map("/".join),
    st.sampled_from(["/", ".", "..", "data", "data/x", "data/derivatives/x", "loop", "loop/x",
                     "file", "file/x", "x" * 5000, "x/" * 3000]),
)  # fmt: skip


@cases(20, 200)
def test_paths(count):
    def check(folder, results):
        with tempfile.TemporaryDirectory() as place:
            root = Path(place)
            (root / "data").mkdir()
            (root / "data" / "dataset_description.json").touch()
            (root / "file").touch()
            (root / "loop").symlink_to(root / "loop")
            fuzzing.outcome(layout.check_results, root / results, root / folder)
            fuzzing.outcome(layout.find_recordings, root / folder)

    fuzz(count, check, PATHS, PATHS)


# --- recordings -----------------------------------------------------------------------------------


def take_in_damaged(folder, count):
    """Damage a dataset in so many ways, in a process of its own; what became of each."""
    places = [str(HERE), str(HERE.parent / "scripts")]
    done = subprocess.run(
        [sys.executable, str(HERE / "fuzzing.py"), str(folder), "0", str(count)],
        env={**os.environ, "PYTHONPATH": os.pathsep.join(places), "PYTHONWARNINGS": "ignore"},
        capture_output=True,
        text=True,
        check=False,
        timeout=300 + 3 * count,
    )
    told = [json.loads(line) for line in done.stdout.splitlines() if line.startswith("[")]
    assert done.returncode == 0, f"after {told[-1:]}: {done.stderr}"
    assert [seed for seed, kind, _ in told if kind == "started"] == list(range(count))
    assert [case for case in told if case[1] == "broke"] == []
    return [kind for _, kind, _ in told if kind != "started"]


@pytest.mark.parametrize("kind", ["edf", "bdf", "brainvision"])
def test_a_small_recording_is_sound(kind, tmp_path):
    """What is damaged below is taken in as it is."""
    folder, out = tmp_path / "data", tmp_path / "out"
    out.mkdir()
    fuzzing.write(folder, fuzzing.small_recordings()[kind])
    assert fuzzing.outcome(fuzzing.take_in, folder, out) == (None, None)
    trials = tables.read_table(out / "a_trials.tsv")
    assert [(t["onset_s"], t["duration_s"]) for t in trials] == [(0.5, 1.5)]


@pytest.mark.parametrize("kind", ["edf", "bdf", "brainvision"])
@cases(25, 250)
def test_damaged_recordings(kind, count, tmp_path):
    found = take_in_damaged(fuzzing.write(tmp_path, fuzzing.small_recordings()[kind]), count)
    assert {"taken in", "refused"} <= set(found)


REAL = {
    "edf": ["mne-testdata/edf/test_uneven_samp.edf"],
    "edf+": ["edf-generator/test_utf8.edf"],
    "edf of two names": ["mne-testdata/edf/duplicate_channel_labels.edf"],
    "bdf": ["mne-testdata/edf/test_bdf_stim_channel.bdf"],
    "brainvision": [
        f"mne-testdata/brainvision/test_old_layout_latin1_software_filter{extension}"
        for extension in (".vhdr", ".vmrk", ".eeg")
    ],
}


@pytest.mark.parametrize("kind", REAL)
@cases(3, 50)
def test_damaged_real_recordings(kind, count, tmp_path):
    source = realdata.require(*REAL[kind])
    stem = Path(REAL[kind][0]).stem
    files = {Path(name).suffix: (source / name).read_bytes() for name in REAL[kind]}
    for extension in {".vhdr", ".vmrk"} & set(files):
        name = Path(fuzzing.STEM).name + "_eeg"
        files[extension] = files[extension].replace(stem.encode(), name.encode())
    folder = fuzzing.write(tmp_path, fuzzing.dataset(files, channels=False))
    assert len(take_in_damaged(folder, count)) == count


def claims(field, text):
    """EDF whose header has another text in a field: name of the field, as in the standard."""
    start, width = {"records": (236, 8), "seconds": (244, 8), "channels": (252, 4)}.get(
        field,
        (256 + 4 * 216, 8),  # samples in a record, of the first of 4 channels
    )
    data = fuzzing.edf(fuzzing.samples_uv())
    return data[:start] + text.ljust(width).encode() + data[start + width :]


@pytest.mark.parametrize(
    ("field", "text"),
    [
        ("records", "99999999"), ("records", "-1"), ("records", "0"), ("seconds", "1e-300"),
        ("seconds", "1e300"), ("seconds", "-1"), ("seconds", "nan"), ("seconds", "0.000001"),
        ("channels", "999"), ("channels", "-1"), ("channels", "0"), ("samples", "99999999"),
        ("samples", "-200"), ("samples", "0"),
    ],
)  # fmt: skip
def test_a_header_that_claims_much_costs_little(field, text, tmp_path):
    """Most is refused; an allocation of 1 GiB fails the test."""
    (tmp_path / "out").mkdir()
    folder = fuzzing.write(tmp_path / "data", fuzzing.dataset({".edf": claims(field, text)}))
    _, told = fuzzing.outcome(fuzzing.take_in, folder, tmp_path / "out")
    # of a file that was not closed, the number of records can be had from its size
    assert told or (field, text) == ("records", "-1")
