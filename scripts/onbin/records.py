"""What is under way and what failed: small records that outlive a job that is killed.

A record is made when a job starts and taken away when it ends well. One that is left tells of a job
that failed, or, if its process is gone, that was killed. A run of the whole has one of its own, so
that two runs do not write into the same results.
"""

import json
import os
import socket
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import asdict, dataclass
from pathlib import Path

from onbin import layout
from onbin.errors import OnbinError

KILLED = (
    "it was killed or stopped before it could end (by a person, the batch system, a lack of memory "
    "or of power)"
)


@dataclass(frozen=True)
class Record:
    """A job that is under way or failed.

    Attributes
    ----------
    step : str
    scope : str
        Recording such as ``sub-01/eeg/sub-01_task-panels``, participant, or ``study``.
    host : str
    process : str
        Number and start of the process, see `process`.
    reason : str or None
        Why it failed; None while nothing is known.
    """

    step: str
    scope: str
    host: str
    process: str
    reason: str | None = None

    @property
    def is_alive(self) -> bool:
        """Whether its process runs on this machine. Of another machine nothing is known."""
        return self.host == socket.gethostname() and is_running(self.process)

    @property
    def told(self) -> str:
        """Why it did not end well."""
        return self.reason or KILLED


def process(pid: int) -> str | None:
    """Number of a process and, where the system tells, when it started; None if it is gone.

    A number alone may be given to another process later.
    """
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return None
    except PermissionError:
        pass
    with suppress(OSError, IndexError):
        fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
        if fields[0] == "Z":  # has ended; only its parent has not noticed
            return None
        return f"{pid} {fields[19]}"
    return str(pid)


def is_running(identity: str) -> bool:
    """Tell whether the process that `process` described is still there."""
    number = identity.split(" ")[0]
    return number.isdigit() and process(int(number)) == identity


def note(path: Path, step: str, scope: str, reason: str | None = None) -> None:
    """Note that a job of this process is under way, or why it failed."""
    path.parent.mkdir(parents=True, exist_ok=True)
    record = Record(step, scope, socket.gethostname(), process(os.getpid()), reason)
    making = path.with_name(f".part-{os.getpid()}-{path.name}")
    making.write_text(json.dumps(asdict(record), indent=2, ensure_ascii=True), encoding="utf-8")
    os.replace(making, path)


def end(path: Path) -> None:
    """Note that it ended well."""
    path.unlink(missing_ok=True)


def read(path: Path) -> Record | None:
    """Read a record; None where there is none that can be understood."""
    try:
        return Record(**json.loads(path.read_text(encoding="utf-8")))
    except (OSError, ValueError, TypeError):
        return None


def unfinished(results: str | Path) -> Iterator[Record]:
    """Records of jobs that failed or were killed."""
    folder = Path(results) / layout.LOGS
    for path in sorted(folder.rglob(f"*{layout.RECORD_ENDING}")):
        record = read(path)
        if record and (record.reason or not record.is_alive):
            yield record


def claim(results: str | Path) -> Record | None:
    """Take the results for one run of the whole.

    Returns
    -------
    Record or None
        Of the run before this one, if that was broken off.

    Raises
    ------
    OnbinError
        If another run is at work on them, or may be, on another machine.
    """
    path = Path(results) / layout.RUN_RECORD
    before = read(path)
    if before and before.is_alive:
        raise OnbinError(
            f"another run is at work on {results} (process {before.process.split()[0]} on this "
            "machine). Wait until it has ended, or end it."
        )
    if before and before.host != socket.gethostname():
        raise OnbinError(
            f"a run on the machine {before.host} holds {results}. If it has ended without a word, "
            f"clear its mark with: rm {path}"
        )
    note(path, "run", "study")
    return before


def release(results: str | Path) -> None:
    """Give the results back."""
    path = Path(results) / layout.RUN_RECORD
    own = read(path)
    if own and own.process == process(os.getpid()):
        end(path)
