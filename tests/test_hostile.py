"""Text and files that mean harm: what a dataset says is shown and written, never obeyed."""

import ast
import csv
import dataclasses
import itertools
import json
import re
from html.parser import HTMLParser
from pathlib import Path
from types import SimpleNamespace

import matplotlib.text
import mne
import numpy as np
import plan as plan_step
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from onbin import arrays, columns, figures, layout, report, runner, tables
from onbin.drawing import save
from onbin.errors import DataError, SettingsError
from onbin.settings import load_settings
from test_report import CHANNELS, Study, study_settings
from workflow import (
    DEMO,
    DEMO_SETTINGS,
    ROOT,
    copy_workflow,
    demo_settings,
    snakemake,
    write_settings,
)

# --- the page -------------------------------------------------------------------------------------

HARM = [
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    "'onmouseover='alert(1)",
    "{{7*7}}{%raw%}",
    "</style></pre></title><svg/onload=alert(1)>",
    "javascript:alert(1)",
    "&lt;b&gt;&#60;i&#62;",
    "]]><!--",
]
# Every name and text that reaches the page from outside, as the made-up study has it.
TITLE, REASON, COLUMN = "Titletext", "reasontext", "columntext"
TAGS, STATES, ASKED = ("tagone", "tagtwo"), ("watchone", "watchtwo", "restthree"), "askedone"
TEXTS = (TITLE, REASON, COLUMN, *TAGS, *STATES, ASKED, "occipital", "photocell", "tasktext",
         "recordingtext", "foldertext", *CHANNELS)  # fmt: skip
TEXT = re.compile(rf"(?<![A-Za-z0-9])({'|'.join(TEXTS)})(?![A-Za-z0-9])")
PEOPLE = re.compile(r"sub-\d\d")


def named_settings():
    flickering = {"flickering": list(TAGS)}
    return study_settings(
        study={"title": TITLE},
        dataset={"folder": "foldertext", "tasks": ["tasktext"]},
        tags={tag: {"frames_per_cycle": 8 + 2 * index} for index, tag in enumerate(TAGS)},
        flicker={
            "photodiode": "photocell",
            "adopt": [{"tag": TAGS[0], "recordings": ["recordingtext"]}],
        },
        conditions={
            STATES[0]: {"events": {COLUMN: REASON}, **flickering, "attended": TAGS[1]},
            STATES[1]: {"events": {COLUMN: "b"}, **flickering, "phase_locked": False},
            STATES[2]: {"events": {COLUMN: "c"}},
        },
        sensors={"reference": CHANNELS[:2]},
        comparisons={
            ASKED: {
                "measure": "amplitude_uv",
                "region": "occipital",
                "plus": [{"condition": STATES[0], "tag": TAGS[0]}],
                "minus": [{"condition": STATES[0], "tag": TAGS[1]}],
            }
        },
    )


@pytest.fixture(scope="module")
def material(tmp_path_factory):
    """All that a report is made from, with plain names."""
    folder = tmp_path_factory.mktemp("named")
    made = Study(folder, named_settings(), people=4, channels=6, bad=[3], lacking={2: STATES[2]})
    plain = made.material()
    rows = [{**row, "reason": row.get("reason") and REASON} for row in plain.participants]
    comparisons = [{**row, "kind": f"correlation with {COLUMN}"} for row in plain.comparisons]
    recordings = {
        name: {
            kind: [{**row, "reason": row["reason"] and REASON} if "reason" in row else row
                   for row in of_kind]
            for kind, of_kind in of.items()
        }
        for name, of in plain.recordings.items()
    }  # fmt: skip
    return dataclasses.replace(
        plain,
        participants=rows,
        comparisons=comparisons,
        recordings=recordings,
        plan_page=f"The plan of {TITLE}\n",
    )


def spoilt(value, spoil):
    """Copy of nested values in which each text has gone through ``spoil``."""
    if isinstance(value, str):
        return spoil(value)
    if isinstance(value, mne.Info):
        info = value.copy()
        mne.rename_channels(info, spoil, verbose="error")
        return info
    if isinstance(value, dict):
        return type(value)({spoilt(k, spoil): spoilt(v, spoil) for k, v in value.items()})
    if isinstance(value, list | tuple):
        return type(value)(spoilt(item, spoil) for item in value)
    if dataclasses.is_dataclass(value):
        changes = {f.name: spoilt(getattr(value, f.name), spoil) for f in dataclasses.fields(value)}
        return dataclasses.replace(value, **changes)
    return value


def with_harm(harm):
    """What adds harm to each text from outside, and to participants what a label can hold of it."""
    label = re.sub(r"[\s/_-]", "", harm)

    def spoil(text):
        text = TEXT.sub(lambda match: match[0] + harm, text)
        return PEOPLE.sub(lambda match: match[0] + label, text)

    return spoil


class Structure(HTMLParser):
    """Elements and the names of their attributes in order, and all text and values together."""

    def __init__(self, page):
        super().__init__()
        self.elements, self.seen, self.links = [], [], []
        self.feed(page)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, tuple(name for name, _ in attributes)))
        self.seen += [value or "" for _, value in attributes]
        self.links += [value for name, value in attributes if name in ("href", "src")]

    def handle_data(self, data):
        self.seen.append(data)

    def handle_comment(self, data):
        self.elements.append(("a comment", ()))

    def handle_pi(self, data):
        self.elements.append(("an instruction", ()))

    def unknown_decl(self, data):
        self.elements.append(("a declaration", ()))


@pytest.fixture
def undrawn(monkeypatch):
    """Figures are not drawn, since what is asked about are their words."""
    for name in ("quality", "bins", "topographies", "responses", "alpha", "relation"):
        monkeypatch.setattr(figures, name, lambda *args: None)


def page_of(material):
    drawings = report.draw(material)
    return Structure(report.page(material, drawings, dict.fromkeys(drawings, b"png")))


@pytest.mark.parametrize("harm", HARM)
def test_text_never_becomes_part_of_the_page(material, undrawn, harm):
    """The page has the very same elements and attributes as with plain names, and no others."""
    plain, page = page_of(material), page_of(spoilt(material, with_harm(harm)))
    assert page.elements == plain.elements
    assert {tag for tag, _ in page.elements}.isdisjoint({"script", "svg", "iframe", "a comment"})
    assert not [n for _, names in page.elements for n in names if n.lower().startswith("on")]
    assert all(re.match(r"#|study/|sub-|manifest|data:image/png;base64,", x) for x in page.links)
    text = "".join(page.seen)
    assert with_harm(harm)("sub-01") in text
    # each name is told somewhere, as it stands; Pz and beyond are in no region and are good
    told = [*TEXTS[: -len(CHANNELS)], *CHANNELS[:3]]
    assert [name for name in told if name + harm not in text.replace("''", "'")] == []


def test_dollars_in_names_are_drawn_as_they_stand(material, tmp_path):
    """In matplotlib's own mathematics \\frac{ is an error, and what is between $ is italic."""
    harm = r"$\frac{$"
    for name, drawing in report.draw(spoilt(material, with_harm(harm))).items():
        save(drawing.figure, tmp_path / f"{name}.png")
        found = drawing.figure.findobj(matplotlib.text.Text)
        assert not any(text.get_parse_math() for text in found if "$" in text.get_text())
        assert harm in " ".join(text.get_text() for text in found), name


def test_a_note_with_dollars_is_drawn(tmp_path):
    save(figures.note(r"nobody has $\frac{$"), tmp_path / "note.png")
    assert (tmp_path / "note.png").stat().st_size > 1000


# --- paths ----------------------------------------------------------------------------------------


def dataset_of(folder, *files):
    for file in (*files, "dataset_description.json"):
        path = folder / file
        path.parent.mkdir(parents=True, exist_ok=True)
        path.touch()
    return folder


SHELL = [
    "sub-01;touch x", "sub-$(touch x)", "sub-`touch x`", "sub-'x", 'sub-"x', "sub-0 1", "sub-..",
    "sub-01\nx", "sub-~", "sub-01\\x", "sub-{participant}", "sub-é", "sub-*",
]  # fmt: skip


@pytest.mark.parametrize("name", SHELL)
def test_folders_that_no_shell_should_see_are_told(tmp_path, name):
    dataset_of(tmp_path, f"{name}/eeg/{name}_task-x_eeg.edf", "sub-1/eeg/sub-1_task-x_eeg.edf")
    with pytest.raises(DataError, match=r"of letters and digits, .* Rename its files") as caught:
        layout.find_recordings(tmp_path)
    assert repr(f"{name}/eeg/{name}_task-x_eeg") in str(caught.value)
    chosen = layout.find_recordings(tmp_path, participants=["1"])  # the way round it
    assert [recording.name for recording in chosen] == ["sub-1/eeg/sub-1_task-x"]


@pytest.mark.parametrize(
    ("stem", "told"),
    [
        *((stem, "of letters and digits") for stem in (
            "sub-1_task-x;touch x", "sub-1_task-$(x)", "sub-1_task-x\nrun-1", "sub-1_task-..",
            "sub-1_x", "sub-1_task-{x}", "x", "", "sub-1_task-a-b")),
        ("sub-2_task-x", "are not those of its folder"),
        ("sub-1_task-a_task-b", "stands there twice"),
        ("sub-1_desc-x", "desc- is not known here"),
    ],
)  # fmt: skip
def test_recordings_that_no_shell_should_see_are_told(tmp_path, stem, told):
    dataset_of(tmp_path, f"sub-1/eeg/{stem}_eeg.edf", "sub-1/eeg/sub-1_task-x_eeg.edf")
    with pytest.raises(DataError, match=told):
        layout.find_recordings(tmp_path)


def test_braces_in_a_name_are_told(tmp_path):
    """Snakemake would take them for a wildcard."""
    dataset_of(tmp_path, "sub-1/eeg/sub-1_task-x_eeg.edf", "sub-1/eeg/sub-1_space-{x}_eeg.json")
    with pytest.raises(DataError, match=r"has braces in its name, as no file of BIDS; rename it"):
        layout.find_recordings(tmp_path)


@pytest.mark.parametrize("stem", ["sub-1_ses-b_task-x", "sub-1_task-x", "sub-1_task-x_ses-a"])
def test_a_recording_in_the_session_of_another_is_told(tmp_path, stem):
    dataset_of(tmp_path, f"sub-1/ses-a/eeg/{stem}_eeg.edf")
    with pytest.raises(DataError, match="are not those of its folder"):
        layout.find_recordings(tmp_path)


def test_files_of_the_system_are_no_recordings(tmp_path):
    """Network disks carry a file ._name beside each name (common practice)."""
    dataset_of(tmp_path, "sub-1/eeg/._sub-1_task-x_eeg.edf", "sub-1/eeg/sub-1_task-x_eeg.edf")
    assert len(layout.find_recordings(tmp_path)) == 1


@pytest.mark.parametrize("label", ["../1", "/etc", "~", "1\n", "*", "1/../1", "..", ""])
def test_participants_are_names_of_folders_and_no_paths(tmp_path, label):
    dataset_of(tmp_path, "sub-1/eeg/sub-1_task-x_eeg.edf")
    with pytest.raises(SettingsError, match=r"dataset\.participants: .* has no"):
        layout.find_recordings(tmp_path, participants=[label])


@pytest.mark.parametrize("key", ["folder", "results", "decisions"])
@pytest.mark.parametrize("path", ["~/out", "", "  ", "out{recording}", "a\nb", "a\0b", "a\x1bb"])
def test_paths_that_would_be_misread_are_told(tmp_path, key, path):
    changed = demo_settings()
    changed["dataset"][key] = path
    with pytest.raises(SettingsError, match=r"must be a path without braces|is no character"):
        load_settings(write_settings(tmp_path / "study.yaml", changed))


@pytest.mark.parametrize("link", ["sub-01", "study", "logs", "sub-01/ses-1", "sub-01/eeg",
                                  "logs/intake", "sub-01/ses-1/eeg"])  # fmt: skip
def test_results_never_land_behind_a_link(tmp_path, link):
    elsewhere, results = tmp_path / "elsewhere", tmp_path / "results"
    elsewhere.mkdir()
    (results / link).parent.mkdir(parents=True)
    (results / link).symlink_to(elsewhere)
    (tmp_path / "data").mkdir()
    with pytest.raises(SettingsError, match=f"{link} is a link, so what is made would land else"):
        layout.check_results(results, tmp_path / "data")


def test_the_results_themselves_may_be_a_link(tmp_path):
    (tmp_path / "large" / "sub-01").mkdir(parents=True)
    (tmp_path / "results").symlink_to(tmp_path / "large")
    (tmp_path / "data").mkdir()
    assert layout.check_results(tmp_path / "results", tmp_path / "data") is None


def test_a_link_in_the_place_of_an_output_is_replaced_and_not_followed(tmp_path):
    victim, out = tmp_path / "victim.txt", tmp_path / "results"
    victim.write_text("mine")
    out.mkdir()
    page = out / "report.html"
    page.symlink_to(victim)
    job = SimpleNamespace(
        input={}, output={"page": str(page)}, params=SimpleNamespace(settings={}), log=[],
        rule="report", wildcards={},
    )  # fmt: skip
    runner.run(lambda inputs, outputs, settings: outputs.page.write_text("page"), job)
    assert (victim.read_text(), page.read_text(), page.is_symlink()) == ("mine", "page", False)


def test_links_in_a_dataset_lead_somewhere_or_are_told(tmp_path):
    """A link to itself is no folder; a link out of the dataset is read and never written."""
    dataset_of(tmp_path / "kept", "eeg/sub-1_task-x_eeg.edf")
    data = dataset_of(tmp_path / "data")
    (data / "sub-1").symlink_to(tmp_path / "kept")
    (recording,) = layout.find_recordings(data)
    assert recording.name == "sub-1/eeg/sub-1_task-x"
    (data / "sub-2").symlink_to(data / "sub-2")
    with pytest.raises(DataError, match="sub-2 is a link that leads nowhere"):
        layout.find_recordings(data)


def test_names_of_folders_are_never_run(tmp_path):
    """The one rule that uses a shell, with names of the dataset and the results that would act."""
    harm = "d; touch one $(touch two) `touch three` '\"&& touch four #"
    copy_workflow(tmp_path)
    (tmp_path / harm).symlink_to(DEMO)
    dataset = {"folder": harm, "results": f"-r {harm}", "tasks": ["panels"]}
    path = write_settings(tmp_path / "study.yaml", demo_settings(dataset=dataset))
    done = snakemake(tmp_path, path, "audit")
    assert done.returncode == 0, done.stdout + done.stderr
    assert "Flicker plan" in done.stdout
    assert "Flicker plan" in (tmp_path / f"-r {harm}/logs/audit/study.log").read_text()
    assert not [name for name in ("one", "two", "three", "four") if (tmp_path / name).exists()]


def test_only_one_rule_uses_a_shell():
    rules = {p.name: p.read_text() for p in [ROOT / "Snakefile", *(ROOT / "rules").glob("*.smk")]}
    assert {name: text.count("shell:") for name, text in rules.items() if "shell:" in text} == {
        "audit.smk": 1
    }
    assert not [name for name, text in rules.items() if re.search(r"\bshell\(|os\.system", text)]


# --- tables ---------------------------------------------------------------------------------------

# OWASP, CSV injection: these begin what a spreadsheet runs; the last four are their full-width kin.
FORMULAS = ["=", "+", "-", "@", "\t=", "\r=", "\n=", "＝", "＋", "－", "＠"]
STRINGS = sorted(name for name, column in columns.COLUMNS.items() if column.kind == "text")


def cells_of(path):
    with open(path, encoding="utf-8", newline="") as file:
        return list(csv.reader(file, delimiter="\t"))


@pytest.mark.parametrize("start", FORMULAS)
def test_no_cell_of_any_column_is_a_formula(tmp_path, start):
    path = tmp_path / "table.tsv"
    text = f"{start}cmd|' /C calc'!A0"
    tables.write_table(path, [dict.fromkeys(STRINGS, text)], STRINGS)
    heads, cells = cells_of(path)
    assert all(re.fullmatch(r"[a-z][a-z0-9_]*", name) for name in heads)
    assert not [cell for cell in cells if cell.startswith(tuple(FORMULAS))]
    assert {*tables.read_table(path)[0].values()} == {text.translate(tables.ONE_LINE)}


def test_every_column_has_a_plain_name():
    assert all(re.fullmatch(r"[a-z][a-z0-9_]*", name) for name in columns.COLUMNS)


CHARACTERS = st.characters(exclude_categories=("Cs",), exclude_characters="\t\r\n")


@settings(max_examples=300, derandomize=True, database=None, deadline=None)
@given(st.one_of(st.text(CHARACTERS), st.text(st.sampled_from("'=+-@ \"n/a＝\0"), max_size=6)))
def test_text_comes_back_as_it_was(text):
    path = Path("table")  # never on disk
    line = tables._written(text)
    assert not line.startswith(tuple(FORMULAS)), path
    assert tables._read("reason", line) == (None if text in ("", tables.MISSING) else text)


def test_numbers_stay_numbers(tmp_path):
    path = tmp_path / "table.tsv"
    row = {"amplitude_uv": -1.5, "windows": -2, "snr_db": -np.inf, "reason": "-1.5"}
    tables.write_table(path, [row], list(row))
    assert cells_of(path)[1] == ["-1.5", "-2", "-inf", "'-1.5"]
    assert tables.read_table(path) == [row]


# --- what is read ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "text",
    [
        "!!python/object/apply:os.system ['touch x']",
        "!!python/name:os.system",
        "!!python/object/new:subprocess.Popen [[touch, x]]",
        "!!python/module:os",
    ],
)
def test_settings_never_run_what_they_hold(tmp_path, text):
    path = tmp_path / "study.yaml"
    path.write_text(f"study:\n  title: {text}\n")
    with pytest.raises(SettingsError, match=r"the tag .* has no meaning here; remove it"):
        load_settings(path)


@pytest.mark.parametrize("text", ["2001-02-31", "!!bool x", "[", "!!python/name:os.system"])
def test_what_the_command_line_gives_is_told_as_what_the_file_holds(text):
    with pytest.raises(SettingsError, match=r"seed: must be a whole number, found '"):
        load_settings(DEMO_SETTINGS, {"seed": text})


def test_arrays_of_objects_are_refused(tmp_path):
    class Harm:
        def __reduce__(self):
            return (Path.touch, (tmp_path / "touched",))

    path = tmp_path / "sub-01_desc-x_psd.npz"
    np.savez(path, psd=np.array([Harm()], dtype=object))
    with pytest.raises(DataError, match=r"_psd\.npz cannot be read \(Object arrays"):
        arrays.read(path)
    assert not (tmp_path / "touched").exists()
    path.write_bytes(b"PK\x03\x04 and nothing")
    with pytest.raises(DataError, match=r"_psd\.npz cannot be read"):
        arrays.read(path)


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("[" * 100_000 + "]" * 100_000, "nested too deeply"),
        ('{"a":' * 100_000 + "1" + "}" * 100_000, "nested too deeply"),
        ('{"SamplingFrequency": ' + "9" * 5000 + "}", "is not valid JSON"),
        ('{"SamplingFrequency"', "is not valid JSON"),
        ("[1]", "holds a list, expected"),
    ],
)
def test_sidecars_that_cannot_be_read_are_told(tmp_path, text, told):
    path = tmp_path / "sub-01_task-x_eeg.json"
    path.write_text(text)
    with pytest.raises(DataError, match=told):
        plan_step.read_metadata([str(path)])


@pytest.mark.parametrize("value", [10**400, -1, 0, 1e-300, float("inf"), float("nan"), True, "9"])
def test_numbers_of_sidecars_that_cannot_be_are_not_known(tmp_path, value):
    path = tmp_path / "sub-01_task-x_eeg.json"
    path.write_text(json.dumps({"SamplingFrequency": value, "PowerLineFrequency": value}))
    told = plan_step.read_metadata([str(path)])
    assert (told.rate_hz, told.line_hz) == (None, None)


# --- the code itself ------------------------------------------------------------------------------

MODULES = sorted((ROOT / "scripts").rglob("*.py"))
FORBIDDEN_MODULES = {"pickle", "dill", "joblib", "marshal", "shelve", "subprocess", "ctypes"}
FORBIDDEN_CALLS = {"eval", "exec", "compile", "__import__", "system", "popen", "unsafe_load",
                   "full_load", "load_all", "read_pickle", "to_csv", "from_string"}  # fmt: skip


def objections(tree):
    """What a syntax tree does that data could make use of."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import | ast.ImportFrom):
            names = [alias.name for alias in node.names] + [getattr(node, "module", None) or ""]
            yield from FORBIDDEN_MODULES & {name.split(".")[0] for name in names}
        if isinstance(node, ast.Call):
            called = ast.unparse(node.func)
            last, named = called.split(".")[-1], {k.arg: k.value for k in node.keywords}
            if last in FORBIDDEN_CALLS and not called.startswith("re."):
                yield called
            if called in ("yaml.load", "yaml.compose"):
                yield called
            if called in ("np.load", "numpy.load") and "allow_pickle" not in named:
                yield f"{called} without allow_pickle=False"
            for name in {"allow_pickle", "shell"} & set(named):
                if not (isinstance(named[name], ast.Constant) and named[name].value is False):
                    yield f"{called} with {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_no_code_obeys_data(path):
    assert list(objections(ast.parse(path.read_text(encoding="utf-8")))) == []


@pytest.mark.parametrize(
    "code",
    [
        "import pickle", "from subprocess import run", "eval('1')", "os.system('x')",
        "yaml.load(text, Loader=yaml.Loader)", "yaml.unsafe_load(text)", "np.load(path)",
        "np.load(path, allow_pickle=True)", "run('x', shell=True)", "import numpy, joblib.x",
    ],
)  # fmt: skip
def test_code_that_obeys_data_is_found(code):
    assert list(objections(ast.parse(code)))


def test_settings_are_read_by_a_safe_loader():
    import yaml
    from onbin import settings as settings_module

    assert issubclass(settings_module._Loader, yaml.SafeLoader)
    tags = itertools.chain(
        settings_module._Loader.yaml_constructors, settings_module._Loader.yaml_multi_constructors
    )
    assert not [tag for tag in tags if tag and "python" in tag]


def test_only_one_module_writes_tables():
    """So that no cell goes round the guard against formulas."""
    writers = [p.name for p in MODULES if re.search(r"csv\.writer|DictWriter", p.read_text())]
    assert writers == ["tables.py"]
