"""The text of a scan file: read it safely, find the lines its keys stand on, lay overrides over it.

In:  a path, or the text of a TOML file; overrides such as "mixture.T=0.1".
Out: `Document`: nested plain dictionaries, the text as read, and the line of every key.
Every way in which reading can fail becomes one `InputError`; what the keys mean is not known here.

Sizes are bounded before parsing, because the standard parser takes quadratic time on long dotted keys and
recurses on nested brackets.
"""

import re
import tomllib
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from gutz.errors import InputError

MAX_BYTES = 256 * 1024
MAX_LINE = 1000
MAX_NAME = 120

_INVISIBLE = frozenset(("Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"))
"""Unicode categories with no business in a scan file: controls, direction overrides, unassigned."""


@dataclass(frozen=True)
class Document:
    """A scan file as read: `data` nested by section, `lines` from dotted key to line number.

    name: the file's own name without its folder, so that no path of the user's machine is ever stored.
    overrides: the texts given with --set, in order; a key set by one has no line.
    """

    name: str
    text: str
    data: dict[str, Any]
    lines: dict[str, int]
    overrides: tuple[str, ...] = ()

    def where(self, key: str) -> str:
        """Say in words where a key stands: "near line 7", "from --set", or nothing where it is absent."""
        if any(text.partition("=")[0].strip() == key for text in self.overrides):
            return "from --set"
        while key:
            if key in self.lines:
                return f"near line {self.lines[key]}"
            key = key.rpartition(".")[0]
        return ""


def read(path: Path, overrides: Sequence[str] = ()) -> Document:
    """Read a scan file. Raises InputError if it is missing, too large, not text, or not TOML."""
    name = path.name[:MAX_NAME]
    if not name.isprintable():
        raise InputError("the name of the scan file holds characters that cannot be shown; rename it")
    try:
        with path.open("rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except IsADirectoryError:
        raise InputError(f"{name}: is a folder; name a scan file (TOML)") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "the path is not valid"
        raise InputError(f"{name}: cannot be read ({reason.lower()})") from None
    if len(raw) > MAX_BYTES:
        raise InputError(f"{name}: is larger than {MAX_BYTES // 1024} KiB, the most a scan file may have")
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(f"{name}: byte {error.start} is not UTF-8; save the file as UTF-8 text") from None
    return parse(text, name, overrides)


def parse(text: str, name: str, overrides: Sequence[str] = ()) -> Document:
    """Parse the text of a scan file. Raises InputError naming the file and, where known, the line."""
    for number, line in enumerate(text.splitlines(), 1):
        if len(line) > MAX_LINE:
            raise InputError(f"{name}: line {number} is longer than {MAX_LINE} characters; break it up")
    for mark in text:
        if mark not in "\t\n\r" and unicodedata.category(mark) in _INVISIBLE:
            number = text.count("\n", 0, text.index(mark)) + 1
            raise InputError(f"{name}: line {number} holds the invisible character U+{ord(mark):04X}; remove it")
    data = _toml(text, name)
    for override in overrides:
        _apply(data, override)
    return Document(name, text, data, _lines(text), tuple(overrides))


def _toml(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except RecursionError:
        raise InputError(f"{name}: brackets are nested too deeply") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{name}: is not valid TOML: {_words(str(error))}") from None
    except ValueError:
        raise InputError(f"{name}: holds a number with too many digits") from None


def _words(message: str) -> str:
    """The parser's message with a small first letter, cut to a readable length."""
    return message[:1].lower() + message[1:200]


def _apply(data: dict[str, Any], override: str) -> None:
    """Lay one "section.key=value" over the data; a value that is not TOML is taken as text."""
    path, equals, value = override.partition("=")
    keys = [key.strip() for key in path.split(".")]
    shown = override if len(override) <= 60 else override[:57] + "..."
    if not equals or len(keys) < 2 or not all(re.fullmatch(r"[A-Za-z0-9_\-]{1,60}", key) for key in keys):
        raise InputError(f'--set {shown}: must look like section.key=value, for example "mixture.T=0.1"')
    if len(override) > MAX_LINE or not override.isprintable():
        raise InputError(f"--set {shown}: must be one line of at most {MAX_LINE} characters")
    here = data
    for key in keys[:-1]:
        here = here.setdefault(key, {})
        if not isinstance(here, dict):
            raise InputError(f"--set {shown}: {key} is a value, not a section")
    try:
        here[keys[-1]] = tomllib.loads(f"value = {value}")["value"]
    except (ValueError, RecursionError):
        here[keys[-1]] = value.strip()


def _lines(text: str) -> dict[str, int]:
    """Line numbers of sections and keys, found by looking at the text; good enough for "near line N"."""
    lines: dict[str, int] = {}
    section = ""
    for number, line in enumerate(text.splitlines(), 1):
        line = line.strip()
        key, equals, _ = line.partition("=")
        if line.startswith("["):
            section = _bare(line.strip("[").partition("]")[0])
            lines.setdefault(section, number)
        elif equals and not line.startswith("#"):
            lines.setdefault(f"{section}.{_bare(key)}".lstrip("."), number)
    return lines


def _bare(dotted: str) -> str:
    return ".".join(part.strip().strip("\"'") for part in dotted.split("."))
