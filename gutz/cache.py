"""Where compiled code is kept between runs, so that only the first one waits for the compiler.

In:  the user's cache folder (platformdirs), the environment.
Out: environment variables that JAX reads when it is imported, or one sentence on why there is no cache.
Compiled code is executed, so the folder must belong to this user and nobody else may write to it.
"""

import os
import stat
from pathlib import Path

from platformdirs import user_cache_path

MAX_BYTES = 1_000_000_000


def enable() -> str:
    """Switch the cache on, before jax is imported. Return "", or a sentence if there will be none."""
    if "JAX_COMPILATION_CACHE_DIR" in os.environ:
        return ""
    folder = user_cache_path("gutz") / "compiled"
    problem = _prepare(folder)
    if problem:
        return f"compiled code is not kept, because {folder} {problem}"
    os.environ["JAX_COMPILATION_CACHE_DIR"] = str(folder)
    os.environ.setdefault("JAX_PERSISTENT_CACHE_MIN_COMPILE_TIME_SECS", "0")
    os.environ.setdefault("JAX_COMPILATION_CACHE_MAX_SIZE", str(MAX_BYTES))
    return ""


def _prepare(folder: Path) -> str:
    """Make the folder, private to this user; return what is wrong with it, or ""."""
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        folder.mkdir(mode=0o700, exist_ok=True)
        found = folder.lstat()
    except OSError as error:
        return f"cannot be made ({(error.strerror or 'disk error').lower()})"
    if stat.S_ISLNK(found.st_mode):
        return "is a link"
    if found.st_uid != os.getuid():
        return "belongs to another user"
    if found.st_mode & 0o022:
        return "can be written by other users"
    return ""
