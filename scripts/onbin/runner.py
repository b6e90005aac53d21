"""What every step's script needs: its log, whole-or-absent outputs, sidecars, plain errors.

A script defines one function of ``inputs``, ``outputs`` and ``settings`` and hands it to `run`.
"""

import errno
import logging
import os
import resource
import shutil
import socket
import sys
import traceback
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from types import SimpleNamespace
from typing import Any, TextIO

from onbin import layout, provenance, records, tables
from onbin.errors import OnbinError

log = logging.getLogger("onbin")


def run(step: Callable[..., None], job: Any) -> None:
    """Run a step as a Snakemake job.

    Outputs are made in a folder beside their place and moved there when all are complete, each
    after its sidecar, so that nobody ever reads half a file.

    Parameters
    ----------
    step : callable
        Called with ``inputs``, ``outputs`` (paths by name) and ``settings`` (a plain dict).
    job : object
        What Snakemake calls ``snakemake``: input, output, params, log, rule.
    """
    outputs = {name: Path(str(path)) for name, path in job.output.items() if name != "sidecars"}
    told = None
    with _recorded(job) as tell, _logging(job.log[0] if job.log else None):
        try:
            with _whole_or_absent(outputs) as making:
                step(
                    inputs=SimpleNamespace(**dict(job.input.items())),
                    outputs=SimpleNamespace(**making),
                    settings=job.params.settings,
                )
                if hasattr(job.output, "sidecars"):
                    for path in making.values():
                        _write_sidecar(path, job)
        except OnbinError as error:
            told = str(error)
        except MemoryError:
            log.error(traceback.format_exc())
            told = (
                "more memory was needed than there was. Run fewer jobs at once (--cores 1), or, "
                "where a batch system sets the limit, give the step more (--set-resources "
                f"{job.rule}:mem_mb=4000)."
            )
        except OSError as error:
            log.error(traceback.format_exc())
            told = _of_the_system(error)
        except Exception as error:
            log.error(traceback.format_exc())
            what = f"{type(error).__name__}: {error}"
            told = f"failed unexpectedly ({what}). The log has the details."
        if told:
            tell(told)
            log.error("%s: %s", job.rule, told)
    if told:
        print(f"\n{_scope(job)}, {job.rule}: {told}\n", file=sys.__stderr__, flush=True)
        sys.exit(1)


def _scope(job: Any) -> str:
    """What a job is about: a recording, a participant, or the study."""
    return " ".join(str(value) for _, value in job.wildcards.items()) or "study"


def _of_the_system(error: OSError) -> str:
    """Say in words what the system refused."""
    where = error.filename or "a file"
    if error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        return (
            f"the disk is full ({error.strerror}: {where}). Make room and give the same command "
            "again; what is done stays done."
        )
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return (
            f"{where} cannot be read or written ({error.strerror}). See to the permissions of the "
            "file and its folder, and give the same command again."
        )
    return f"{where}: {error.strerror or error}. The log has the details."


@contextmanager
def _recorded(job: Any) -> Iterator[Callable[[str], None]]:
    """Keep a record of the job while it runs; yield how to tell why it fails."""
    if not job.log:
        yield lambda reason: None
        return
    path = layout.record_of(str(job.log[0]))
    failed = False

    def tell(reason: str) -> None:
        nonlocal failed
        failed = True
        with suppress(OSError):  # a full disk; the first record stays, and the terminal tells
            records.note(path, job.rule, _scope(job), reason)

    with suppress(OSError):
        records.note(path, job.rule, _scope(job))
    yield tell
    if not failed:
        records.end(path)


@contextmanager
def _logging(path: str | None) -> Iterator[None]:
    """Send the log, warnings and whatever libraries print to the rule's log file.

    Where that cannot be written, on a full disk say, the job goes on without: what becomes of its
    outputs is told in any case.
    """
    try:
        file = _open_log(path)
    except OSError:
        yield
        return
    handler = logging.StreamHandler(file)
    handler.setFormatter(logging.Formatter("%(levelname)s %(message)s"))
    kept = sys.stdout, warnings.showwarning, logging.raiseExceptions
    log.addHandler(handler)
    log.setLevel(logging.INFO)
    sys.stdout, warnings.showwarning, logging.raiseExceptions = file, _log_warning, False
    try:
        yield
    finally:
        peak_mib = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024  # from KiB
        log.info("peak memory: %.0f MiB", peak_mib)
        sys.stdout, warnings.showwarning, logging.raiseExceptions = kept
        log.removeHandler(handler)
        with suppress(OSError):
            file.close()


def _open_log(path: str | None) -> TextIO:
    if path is None:
        return open(os.devnull, "w", encoding="utf-8")
    Path(path).parent.mkdir(parents=True, exist_ok=True)
    if os.path.islink(path):  # what it leads to is not ours to write over
        os.unlink(path)
    # names of files need not be text in UTF-8
    return open(path, "w", encoding="utf-8", errors="backslashreplace", buffering=1)


def _log_warning(message: Warning | str, category: type[Warning], *_: object) -> None:
    log.warning("%s: %s", category.__name__, message)


@contextmanager
def _whole_or_absent(outputs: dict[str, Path]) -> Iterator[dict[str, Path]]:
    """Yield places to make outputs in; move them and their sidecars into place at the end."""
    first = next(iter(outputs.values()))
    mark = f".part-{first.name}-{socket.gethostname()}-"
    first.parent.mkdir(parents=True, exist_ok=True)
    for left in first.parent.glob(f"{mark}*"):
        pid = left.name.removeprefix(mark)
        # a host's name may begin like another's; a number may be given to a process again
        if pid.isdigit() and (int(pid) == os.getpid() or not records.process(int(pid))):
            shutil.rmtree(left, ignore_errors=True)
    folder = first.parent / f"{mark}{os.getpid()}"
    folder.mkdir()
    try:
        making = {name: folder / path.name for name, path in outputs.items()}
        yield making
        for name, path in outputs.items():
            path.parent.mkdir(parents=True, exist_ok=True)
            beside = Path(layout.sidecar(making[name]))
            if beside != making[name] and beside.exists():
                os.replace(beside, layout.sidecar(path))
            os.replace(making[name], path)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _write_sidecar(made: Path, job: Any) -> None:
    about = {"Description": f"Made by the step {job.rule} of onbin."}
    if made.suffix == ".tsv":
        about = tables.dictionary(tables.header(made))
    text = provenance.make_sidecar(made, job.rule, map(str, job.input), job.params.settings, about)
    Path(layout.sidecar(made)).write_text(text, encoding="utf-8")
