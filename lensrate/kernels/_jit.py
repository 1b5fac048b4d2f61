"""The one decorator of all kernels.

numba's cache notices an edit of the decorated function's own file only, so a kernel that calls
another file's kernel would keep stale machine code. The cache folder is therefore named after the
text of every kernel file.
"""

import hashlib
import os
from functools import partial
from pathlib import Path

import numba

_HERE = Path(__file__).parent
KEY = hashlib.sha256(b"".join(f.read_bytes() for f in sorted(_HERE.glob("*.py")))).hexdigest()[:12]


def _writable(folder):
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError:
        return False
    return os.access(folder, os.W_OK)


def cache_folder():
    """Where compiled kernels are kept: beside the sources, else in the user's cache folder."""
    if numba.config.CACHE_DIR:
        return Path(numba.config.CACHE_DIR) / KEY
    beside = _HERE / "__pycache__"
    home = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "lensrate"
    return (beside if _writable(beside) else home) / KEY


CACHE = cache_folder()


def kernel(func=None, **options):
    """Compile a function of floats and arrays; cached, without the interpreter lock, division as numpy does it."""
    if func is None:
        return partial(kernel, **options)
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(CACHE)
    try:
        return numba.njit(cache=True, error_model="numpy", nogil=True, **options)(func)
    finally:
        numba.config.CACHE_DIR = before
