"""The one way in which this package compiles a function, and where the compiled code is kept.

Numba's cache looks only at the file that holds a function: after an edit of a helper in another file the caller would
go on returning the old answer. The cache folder is therefore named by a hash of all kernel sources.
"""

import hashlib
import os
import tempfile
from pathlib import Path
from typing import Any

import numba


def _cache_folder() -> Path:
    digest = hashlib.sha256(numba.__version__.encode())
    for source in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(source.read_bytes())
    base = Path(os.environ.get("XDG_CACHE_HOME", Path.home() / ".cache")) / "hedgesim"
    folder = base / digest.hexdigest()[:16]
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if os.access(folder, os.W_OK):
            return folder
    except OSError:
        pass
    return Path(tempfile.gettempdir()) / f"hedgesim-{os.getuid() if hasattr(os, 'getuid') else 0}" / folder.name


_config: Any = numba.config
if "NUMBA_CACHE_DIR" not in os.environ:
    _config.CACHE_DIR = str(_cache_folder())


def compiled_before() -> bool:
    """Whether compiled kernels of this version are at hand."""
    return any(Path(_config.CACHE_DIR).rglob("*.nbi"))


# No fastmath: without it the same bits come out on every processor.
kernel: Any = numba.njit(nogil=True, cache=True, error_model="numpy")
device: Any = numba.njit(error_model="numpy")
