"""What is said at the end of a run."""

from pathlib import Path

from onbin import layout, tables


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
