"""Where files may land: folders named by the user are checked, and nothing is written outside them.

In:  a folder as text, and names of files to be made in it.
Out: resolved paths, or one `InputError` / `OutputError` sentence.
"""

import os
import unicodedata
from pathlib import Path

from gutz.errors import InputError, OutputError

MAX_PATH = 4000
MAX_PART = 255


def output_folder(text: str) -> Path:
    """Check the name of an output folder, and resolve it; nothing is made yet.

    Raises InputError for names with invisible characters or of impossible length, OutputError where a file
    stands in the way.
    """
    for mark in text:
        if unicodedata.category(mark) in ("Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"):
            raise InputError(f"--out holds the invisible character U+{ord(mark):04X}; choose another name")
    if not text.strip() or len(text) > MAX_PATH or any(len(os.fsencode(p)) > MAX_PART for p in Path(text).parts):
        raise InputError(f"--out must be the name of a folder, with parts of at most {MAX_PART} bytes")
    try:
        folder = Path(text).resolve()
        blocked = folder.exists() and not folder.is_dir()
    except (OSError, RuntimeError, ValueError):
        raise InputError("--out must be the name of a folder that can be reached") from None
    if blocked:
        raise OutputError(f"--out {folder.name}: is a file; choose a folder")
    return folder


def results_folder(text: str, name: str, force: bool) -> Path:
    """Check the folder that is to receive the file `name`; nothing is made yet.

    Raises InputError or OutputError as `output_folder`, and OutputError where the file is there already, unless
    `force` says that it may go.
    """
    folder = output_folder(text)
    if folder.exists() and inside(folder, name).exists() and not force:
        raise OutputError(f"{folder.name} holds {name} already; choose another --out or replace it with --force")
    return folder


def inside(folder: Path, name: str) -> Path:
    """The path of a file to be made in a folder, after links are followed.

    Raises OutputError if a link would take it outside.
    """
    if name in ("", ".", "..") or Path(name).name != name:
        raise OutputError(f'"{name}" is not the plain name of a file')
    path = folder / name
    if not path.resolve().is_relative_to(folder.resolve()):
        raise OutputError(f"{name} in the output folder is a link to somewhere else; remove it")
    return path


def make_folder(folder: Path) -> None:
    """Make the output folder. Raises OutputError if that is not possible."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        writable = os.access(folder, os.W_OK | os.X_OK)
    except OSError as error:
        raise OutputError(f"{folder.name}: the folder cannot be made ({_reason(error)})") from None
    if not writable:
        raise OutputError(f"{folder.name}: the folder cannot be written to; choose another with --out")


def sync_folder(folder: Path) -> None:
    """Ask the system to put a folder's entries on the disk, so that a rename survives a power cut."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def replace_durably(temporary: Path, final: Path) -> None:
    """Give a finished temporary file its final name: sync it, rename it, sync the folder."""
    with temporary.open("rb+") as file:
        os.fsync(file.fileno())
    temporary.replace(final)
    sync_folder(final.parent)


def _reason(error: OSError) -> str:
    return (error.strerror or type(error).__name__).lower()
