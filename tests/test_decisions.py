"""What a person decides is read exactly, and told apart from what does not exist."""

import pytest
from onbin import decisions, tables
from onbin.errors import DataError, SettingsError
from onbin.layout import Recording

RECORDINGS = ["sub-01_task-x", "sub-02_task-x"]
HEADER = "recording\tkind\titem\tverdict\treason\tby\tdate\n"
USUAL = (
    "sub-01_task-x\tchannel\tFp1\tbad\tloose\tRK\t2026-03-31\n"
    "sub-01_task-x\tcomponent\t3 Fp1\tkeep\tcarries the response\tRK\t2026-03-31\n"
    "sub-02_task-x\trecording\tn/a\tleave out\tfell asleep\tRK\tn/a\n"
)


@pytest.fixture
def written(tmp_path):
    def write(lines, header=HEADER):
        path = tmp_path / "decisions.tsv"
        path.write_text(header + lines, encoding="utf-8")
        return path

    return write


def test_decisions_are_read_with_their_lines(written):
    channel, component, recording = decisions.read(written(USUAL), RECORDINGS)
    assert (channel.line, component.line, recording.line) == (2, 3, 4)
    assert (channel.item, channel.verdict, channel.told) == ("Fp1", "bad", "loose (decided by RK)")
    assert component.item == "3 Fp1"
    assert recording.verdict == decisions.LEAVE_OUT


def test_columns_may_stand_in_any_order_and_lines_may_be_empty(written):
    text = "date\tby\treason\tverdict\titem\tkind\trecording\r\n\r\n"
    text += "2026-03-31\tRK\tloose\tbad\tFp1\tchannel\tsub-01_task-x\r\n"
    (decision,) = decisions.read(written(text, header=""), RECORDINGS)
    assert (decision.line, decision.item, decision.recording) == (3, "Fp1", "sub-01_task-x")


def test_without_a_table_nothing_is_decided(tmp_path, written):
    assert decisions.read(tmp_path / "decisions.tsv", RECORDINGS) == []
    assert decisions.read(written(""), RECORDINGS) == []


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("sub-1_task-x\tchannel\tFp1\tbad\tloose\tRK\tn/a", "no recording 'sub-1_task-x'; did you"),
        ("sub-01_task-x\tchanel\tFp1\tbad\tloose\tRK\tn/a", "kind is 'chanel', expected recording"),
        ("sub-01_task-x\tchannel\tFp1\tremove\tloose\tRK\tn/a", "expected bad or good"),
        ("sub-01_task-x\tcomponent\t3 Fp1\tbad\tblinks\tRK\tn/a", "expected remove or keep"),
        ("sub-01_task-x\tchannel\tn/a\tbad\tloose\tRK\tn/a", "item is 'n/a', expected the channel"),
        ("sub-01_task-x\trecording\tFp1\tkeep\tfine\tRK\tn/a", "item is 'Fp1', expected n/a"),
        ("sub-01_task-x\tchannel\tFp1\tbad\tn/a\tRK\tn/a", "a reason is missing"),
        ("sub-01_task-x\tchannel\tFp1\tbad\tloose\tRK\t31.3.26", "expected one such as 2026-03-31"),
    ],
)
def test_what_cannot_be_understood_names_the_line(written, line, told):
    path = written(USUAL.splitlines()[1] + "\n" + line + "\n")
    with pytest.raises(SettingsError) as caught:
        decisions.read(path, RECORDINGS)
    assert str(path) in str(caught.value)
    assert "line 3: " in str(caught.value)
    assert told in str(caught.value)


def test_two_decisions_about_one_thing_name_both_lines(written):
    path = written(USUAL + "sub-01_task-x\tchannel\tFp1\tgood\tfine\tML\tn/a\n")
    with pytest.raises(SettingsError, match="line 5: decides what line 2 decides too"):
        decisions.read(path, RECORDINGS)


def test_a_missing_column_is_named(written):
    with pytest.raises(SettingsError, match="no column reason, by; expected recording, kind"):
        decisions.read(
            written(
                "sub-01_task-x\tchannel\tFp1\tbad\tn/a\n", "recording\tkind\titem\tverdict\tdate\n"
            ),
            RECORDINGS,
        )


def test_left_out_recordings_go_and_one_must_remain(written):
    made = decisions.read(written(USUAL), RECORDINGS)
    left_out = decisions.left_out(made)
    assert left_out == {"sub-02_task-x": "fell asleep (decided by RK)"}
    found = [Recording(f"{stem[:6]}/eeg/{stem}", ".edf", ()) for stem in RECORDINGS]
    assert decisions.remaining(found, left_out) == found[:1]
    with pytest.raises(SettingsError, match="all 1 recordings are left out"):
        decisions.remaining(found[1:], left_out)


def test_an_item_that_does_not_exist_names_the_line_and_the_nearest(written):
    path = written(USUAL)
    chosen = decisions.about(decisions.read(path, RECORDINGS), "sub-01_task-x", "component")
    by_item = decisions.by_item(chosen, ["3 Fp1", "4 Oz"], str(path), "sub-01_task-x")
    assert by_item["3 Fp1"]["verdict"] == decisions.KEEP
    # fitted anew: component 3 is another one now
    with pytest.raises(
        DataError, match=r"line 3: sub-01_task-x has no '3 Fp1'; did you mean 3 Fp2"
    ):
        decisions.by_item(chosen, ["3 Fp2", "4 Oz"], str(path), "sub-01_task-x")


def test_suggestions_can_be_read_back_as_decisions(tmp_path):
    sensors = [
        {"name": "Fp1", "verdict": "bad", "reason": "flat (flat_uv 0, at least 0.5)"},
        {"name": "Fp2", "verdict": "good", "reason": None},
    ]
    components = [
        {
            "component": 3,
            "peak_channel": "Fp1",
            "verdict": "removed",
            "flagged": False,
            "reason": "eye",
        },
        {
            "component": 5,
            "peak_channel": "Oz",
            "verdict": "kept",
            "flagged": True,
            "reason": "muscle",
        },
        {
            "component": 6,
            "peak_channel": "Pz",
            "verdict": "kept",
            "flagged": False,
            "reason": "brain",
        },
    ]
    people = [{"participant": "sub-02", "in_study": False, "reason": "few windows"}]
    lines = [
        *decisions.of_participants(people, RECORDINGS),
        *decisions.of_channels("sub-01_task-x", sensors),
        *decisions.of_components("sub-01_task-x", components),
    ]
    tables.write_table(tmp_path / "draft.tsv", lines, decisions.HEADER)
    made = decisions.read(tmp_path / "draft.tsv", RECORDINGS)
    assert [(d.recording, d.kind, d.item, d.verdict) for d in made] == [
        ("sub-02_task-x", "recording", "n/a", "leave out"),
        ("sub-01_task-x", "channel", "Fp1", "bad"),
        ("sub-01_task-x", "component", "3 Fp1", "remove"),
        ("sub-01_task-x", "component", "5 Oz", "keep"),
    ]
    assert {d.by for d in made} == {"onbin"}
