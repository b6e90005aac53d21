"""What is said at the end of a run."""

from pathlib import Path

from onbin import layout, tables

FAILURE = "ERROR "  # how the runner begins the line of a log that tells of a failure


def closing(results: str, seconds: float) -> str:
    """Who was used and set aside, where the report is, how long it took."""
    report = Path(layout.result(results, "report_page"))
    table = Path(layout.result(results, "study_participants"))
    lines = [""]
    if table.is_file():
        rows = tables.read_table(table)
        used = [row for row in rows if row["in_study"]]
        lines.append(
            f"{len(used)} of {len(rows)} participants are in the study, with "
            f"{sum(row['windows_kept'] for row in used)} windows from "
            f"{sum(row['recordings'] for row in used)} recordings."
        )
        lines += [
            f"  set aside: {row['participant']} ({row['reason']})"
            for row in rows
            if not row["in_study"]
        ]
    if report.is_file():
        lines.append(f"The report is {report}")
    minutes, rest = divmod(round(seconds), 60)
    lines.append(f"Time taken: {minutes} min {rest} s")
    return "\n".join(lines)


def failed(results: str, since: float) -> str:
    """Which steps failed of which recordings, and why.

    Parameters
    ----------
    results : str
    since : float
        Start of the run in seconds since the epoch: older logs are not of this run.
    """
    lines = []
    folder = Path(results) / "logs"
    for path in sorted(folder.rglob("*.log")):
        if path.stat().st_mtime < since:
            continue
        told = [
            line.removeprefix(FAILURE)
            for line in path.read_text(encoding="utf-8", errors="replace").splitlines()
            if line.startswith(FAILURE)
        ]
        if told:
            scope = path.relative_to(folder).with_suffix("").as_posix().partition("/")[2]
            lines.append(f"  {scope}, {told[-1]}\n    log: {path}")
    if not lines:
        return "\nThe run did not end well; what Snakemake says above tells why."
    return (
        f"\n{len(lines)} failed; all that does not rest on them is done.\n"
        + "\n".join(lines)
        + "\nPut right what is told and give the same command again, or go on without them: name"
        "\nthe other participants under dataset.participants in the settings."
    )
