"""Choosing points of a file: its plan, and the values given with --at.

In:  a scan file, overrides, texts such as "depth=12".
Out: the checked plan, and numbers by axis name.
"""

import math
from collections.abc import Sequence
from pathlib import Path

from gutz.errors import InputError
from gutz.scan import document, spec
from gutz.scan.document import Document
from gutz.scan.plan import Plan, plan


def load(file: Path, overrides: Sequence[str], *, clouds: bool = False) -> tuple[Document, Plan]:
    """Read and check a file. Raises InputError listing its mistakes.

    clouds: the command can do with atom numbers in a [trap] in place of chemical potentials.
    """
    source = document.read(file, overrides)
    full = plan(spec.check(source))
    if full.spec.trap is not None and not clouds:
        raise InputError(f"{source.name}: has a [trap], which this command does not solve; use: gutz cloud")
    return source, full


def values(texts: Sequence[str]) -> dict[str, float]:
    """Read the texts given with --at. Raises InputError for anything but one number per name."""
    found: dict[str, float] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        name = name.strip()
        try:
            number = float(value)
        except ValueError:
            number = math.nan
        if not equals or not name or not math.isfinite(number):
            raise InputError(f'--at {text[:40]}: must be an axis and a number, for example "depth=12"')
        if name in found:
            raise InputError(f"--at {name}: is given twice; give one value")
        found[name] = number
    return found
