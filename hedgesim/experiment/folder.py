"""The folder of a run: never over another experiment's results, and never half-written."""

import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from hedgesim.errors import ExperimentError, Problem, RunError

FINDINGS = "findings.json"


def refuse_foreign(folder: Path, *, digest: str, overwrite: bool) -> None:
    """Make sure that results may be written to `folder`.

    Parameters
    ----------
    folder : where the results are to stand
    digest : of the experiment and its inputs; results with the same digest are replaced without asking
    overwrite : results of another experiment may be replaced

    Raises
    ------
    ExperimentError
        when the folder holds something that must not be replaced
    """
    if not folder.exists() and not folder.is_symlink():
        return
    if not folder.is_dir():
        raise ExperimentError([Problem(str(folder), None, None, "", "is not a folder", "name another with --out")])
    if not any(folder.iterdir()):
        return
    try:
        found = json.loads((folder / FINDINGS).read_text(encoding="utf-8"))
        owner = found["hashes"]["experiment"]
    except (OSError, ValueError, KeyError, TypeError):
        message = "holds files that are not results of a run"
        raise ExperimentError([Problem(str(folder), None, None, "", message, "name another with --out")]) from None
    if owner != digest and not overwrite:
        message = f"holds the results of another experiment ({found.get('title', 'untitled')!r}, {owner[:12]})"
        advice = "add --overwrite to replace them, or name another folder with --out"
        raise ExperimentError([Problem(str(folder), None, None, "", message, advice)])


@contextmanager
def replaced_at_once(folder: Path) -> Iterator[Path]:
    """Give a folder beside `folder` to write into; it takes the place of `folder` only when all went well.

    Raises
    ------
    RunError
        when the folder cannot be written
    """
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.parent))
    except OSError as error:
        raise RunError(f"{folder}: cannot be written ({(error.strerror or str(error)).lower()})") from None
    try:
        yield fresh
        fresh.chmod(0o777 & ~_umask())
        if folder.exists():
            old = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.parent)) / "old"
            folder.rename(old)
            try:
                fresh.rename(folder)
            except OSError:
                old.rename(folder)
                raise
            finally:
                shutil.rmtree(old.parent, ignore_errors=True)
        else:
            fresh.rename(folder)
    except OSError as error:
        raise RunError(f"{folder}: cannot be written ({(error.strerror or str(error)).lower()})") from None
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def _umask() -> int:
    current = os.umask(0)
    os.umask(current)
    return current
