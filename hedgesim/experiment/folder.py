"""The folder of a run: never over another experiment's results, and never half-written."""

import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from hedgesim.errors import ExperimentError, Problem, RunError

FINDINGS = "findings.json"
# What a run writes. Anything else in a result folder was put there by someone, and is not ours to remove.
_OWN = frozenset(
    [FINDINGS, "experiment.yaml", "figures", "ledger.npz", "ledger.parquet", "report.pdf"]
    # File browsers leave these.
    + [".DS_Store", "Thumbs.db"]
    + [f"{table}.csv" for table in ("break_even", "breakdown", "curve", "frequency", "price_of_risk", "schedules")]
)


def refuse_unwritable(folder: Path) -> None:
    """Make sure that `folder` can be made, before any work is done for it.

    Raises
    ------
    RunError
        when the place it is to stand in is no folder or may not be written to
    """
    place = next(parent for parent in folder.absolute().parents if parent.exists())
    if not place.is_dir():
        raise RunError(f"{folder}: cannot be written ({place} is not a folder)")
    if not os.access(place, os.W_OK | os.X_OK):
        raise RunError(f"{folder}: cannot be written ({place} may not be written to)")


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
    strange = sorted(path.name for path in folder.iterdir() if path.name not in _OWN)
    if strange:
        message = f"holds {strange[0]!r}, which no run wrote and would be lost"
        raise ExperimentError([Problem(str(folder), None, None, "", message, "move it, or name another with --out")])
    if owner != digest and not overwrite:
        message = f"holds the results of another experiment ({found.get('title', 'untitled')!r}, {owner[:12]})"
        advice = "add --overwrite to replace them, or name another folder with --out"
        raise ExperimentError([Problem(str(folder), None, None, "", message, advice)])


@contextmanager
def replaced_at_once(folder: Path) -> Iterator[Path]:
    """Give a folder beside `folder` to write into; it takes the place of `folder` only when all went well.

    Otherwise everything is as before, parent folders included.

    Raises
    ------
    RunError
        when the folder cannot be written
    """
    missing = [parent for parent in folder.parents if not parent.exists()]
    fresh: Path | None = None
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.parent))
        yield fresh
        fresh.chmod(0o777 & ~_umask())
        if folder.exists():
            _exchange(folder, fresh)
        else:
            fresh.rename(folder)
    except OSError as error:
        raise RunError(f"{folder}: cannot be written ({(error.strerror or str(error)).lower()})") from None
    finally:
        if fresh is not None:
            shutil.rmtree(fresh, ignore_errors=True)
        for parent in missing:
            # A folder that holds the results, or anything else, is not removed.
            with suppress(OSError):
                parent.rmdir()


def _exchange(folder: Path, fresh: Path) -> None:
    """Put `fresh` in the place of `folder`; an interruption at any point leaves one of the two there."""
    aside = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.parent))
    old = aside / "old"
    try:
        folder.rename(old)
        fresh.rename(folder)
    finally:
        if not folder.exists() and old.exists():
            old.rename(folder)
        shutil.rmtree(aside, ignore_errors=True)


def _umask() -> int:
    current = os.umask(0)
    os.umask(current)
    return current
