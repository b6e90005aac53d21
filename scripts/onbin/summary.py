"""What is said at the beginning and at the end of a run."""

import re
import shlex
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

from onbin import decisions, layout, records, tables
from onbin.layout import Recording
from onbin.records import Record

LEAVE_OUT_FAILED = "leave_out_failed"
# In Snakemake's words: the log of a job that failed, among what it tells of the job.
FAILED_JOB = re.compile(r"^Error in rule \S+:\n(?:    .*\n)*?    log: (\S.*?\.log)(?: \(|$)", re.M)


def opening(paths: Sequence[str], before: Record | None, results: str) -> str:
    """What a run finds of earlier ones.

    Parameters
    ----------
    paths : sequence of str
        Every file that the study makes.
    before : Record or None
        Of a run that was broken off, from `records.claim`.
    results : str
    """
    there = sum(Path(path).is_file() for path in paths)
    lines = [f"\nFound {there} of {len(paths)} files of the study in {results}."]
    if before:
        lines.append("The run before this one was broken off; what it finished is kept.")
    left = list(records.unfinished(results))
    if left:
        lines.append(f"{_count(len(left), 'step')} had not ended well and will be made anew:")
        lines += [f"  {record.step} of {record.scope}" for record in left]
    return "\n".join(lines)


def closing(results: str, seconds: float) -> str:
    """Who was used and set aside, where the report is, how long it took; the verdict is last."""
    report = Path(layout.result(results, "report_page"))
    table = Path(layout.result(results, "study_participants"))
    lines = [""]
    verdict = "Complete."
    if table.is_file():
        rows = tables.read_table(table)
        used = [row for row in rows if row["in_study"]]
        lines.append(
            f"{len(used)} of {len(rows)} participants are in the study, with "
            f"{sum(row['windows_kept'] for row in used)} windows from "
            f"{sum(row['recordings'] for row in used)} recordings."
        )
        aside = [row for row in rows if not row["in_study"]]
        left_out = [row for row in rows if row["in_study"] and row["left_out"]]
        lines += [f"  set aside: {row['participant']} ({row['reason']})" for row in aside]
        lines += [f"  left out: {row['left_out']}" for row in left_out]
        if aside or left_out:
            counts = [_count(len(aside), "participant") + " set aside"] * bool(aside)
            counts += [f"recordings of {len(left_out)} more left out"] * bool(left_out)
            verdict = f"Complete, with {' and '.join(counts)}."
    if report.is_file():
        lines.append(f"The report is {report}")
    minutes, rest = divmod(round(seconds), 60)
    lines += [f"Time taken: {minutes} min {rest} s", verdict]
    return "\n".join(lines)


def failed(results: str, recordings: Sequence[Recording], arguments: Sequence[str]) -> str:
    """Which steps failed of which recordings, why, and what to do; the verdict is last.

    Parameters
    ----------
    results : str
    recordings : sequence of Recording
        Those of the study; what was left of others is not told.
    arguments : sequence of str
        What Snakemake was started with.
    """
    scopes = {"study", *(r.name for r in recordings), *(r.participant for r in recordings)}
    left = [record for record in records.unfinished(results) if record.scope in scopes]
    if not left:
        return "\nFailed: the run did not end well; what Snakemake says above tells why."
    lines = ["", f"{_count(len(left), 'step')} failed; all that does not rest on them is done."]
    for record in left:
        lines += [
            f"  {record.scope}, {record.step}: {record.told}",
            f"    log: {layout.log(results, record.step, record.scope)}",
        ]
    pasted = ["\t".join(map(str, line.values())) for line in failed_lines(left, recordings)]
    lines += [
        "Put right what is told and give the same command again: what is done stays done.",
    ]
    if pasted:
        header = "\t".join(decisions.HEADER)
        lines += [
            "Or go on without them: make the study from the rest with",
            f"  {without_failed(arguments)}",
            "or decide it for good with these lines of the table of decisions (by tabs):",
            f"  {header}",
            *(f"  {line}" for line in pasted),
        ]
    return "\n".join([*lines, f"Failed: {_count(len(left), 'step')}."])


def note_killed(text: str) -> None:
    """Leave a record for jobs that were killed before they could make their own.

    Parameters
    ----------
    text : str
        What Snakemake wrote into its log: it names the log of each job that failed.
    """
    for path in FAILED_JOB.findall(text):
        step, _, scope = path.removesuffix(".log").partition(f"{layout.LOGS}/")[2].partition("/")
        if scope and not layout.record_of(path).exists():
            records.note(layout.record_of(path), step, scope, records.KILLED)


def failed_recordings(left: Iterable[Record], recordings: Sequence[Recording]) -> dict[str, str]:
    """Recordings of which a step failed, by file name, and why."""
    why: dict[str, str] = {}
    for record in left:
        for recording in recordings:
            if record.scope in (recording.name, recording.participant):
                why.setdefault(recording.stem, f"failed in the step {record.step}: {record.told}")
    return why


def failed_lines(left: Iterable[Record], recordings: Sequence[Recording]) -> list[Mapping]:
    """Lines of decisions that would leave them out."""
    return [
        decisions.suggest(stem, "recording", tables.MISSING, decisions.LEAVE_OUT, reason)
        for stem, reason in failed_recordings(left, recordings).items()
    ]


def without_failed(arguments: Sequence[str]) -> str:
    """Command that makes the study from the rest.

    Examples
    --------
    >>> without_failed(["--configfile", "my study.yaml", "--", "report"])
    "snakemake --configfile 'my study.yaml' --config leave_out_failed=true -- report"
    """
    end = list(arguments).index("--") if "--" in arguments else len(arguments)
    switch = ["--config", f"{LEAVE_OUT_FAILED}=true"]
    return shlex.join(["snakemake", *arguments[:end], *switch, *arguments[end:]])


def _count(number: int, name: str) -> str:
    return f"{number} {name}{'s' if number != 1 else ''}"
