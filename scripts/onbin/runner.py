"""What every step's script needs: its log, whole-or-absent outputs, sidecars, plain errors.

A script defines one function of ``inputs``, ``outputs`` and ``settings`` and hands it to `run`.
"""

import logging
import os
import shutil
import socket
import sys
import traceback
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import SimpleNamespace
from typing import Any

from onbin import layout, provenance, tables
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
    with _logging(job.log[0] if job.log else None):
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
            _fail(f"{job.rule}: {error}", job)
        except Exception as error:
            log.error(traceback.format_exc())
            what = f"{type(error).__name__}: {error}"
            _fail(f"{job.rule}: failed unexpectedly ({what}). The log has the details.", job)


@contextmanager
def _logging(path: str | None) -> Iterator[None]:
    """Send the log, warnings and whatever libraries print to the rule's log file."""
    if path is None:
        yield
        return
    Path(path).parent.mkdir(parents=True, exist_ok=True)
    with open(path, "w", encoding="utf-8", buffering=1) as file:
        handler = logging.StreamHandler(file)
        handler.setFormatter(logging.Formatter("%(levelname)s %(message)s"))
        log.addHandler(handler)
        log.setLevel(logging.INFO)
        kept = sys.stdout, warnings.showwarning
        sys.stdout = file
        warnings.showwarning = _log_warning
        try:
            yield
        finally:
            sys.stdout, warnings.showwarning = kept
            log.removeHandler(handler)


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
        if pid.isdigit() and (int(pid) == os.getpid() or not _alive(int(pid))):
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


def _alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _write_sidecar(made: Path, job: Any) -> None:
    about = {"Description": f"Made by the step {job.rule} of onbin."}
    if made.suffix == ".tsv":
        about = tables.dictionary(tables.header(made))
    text = provenance.make_sidecar(made, job.rule, map(str, job.input), job.params.settings, about)
    Path(layout.sidecar(made)).write_text(text, encoding="utf-8")


def _fail(message: str, job: Any) -> None:
    """Tell the user in the log and on the terminal, without a traceback, and end the job."""
    log.error(message)
    recording = " ".join(str(value) for _, value in job.wildcards.items())
    print(f"\n{recording or 'study'}, {message}\n", file=sys.__stderr__, flush=True)
    sys.exit(1)
