"""What every figure starts and ends with: the house style, a sheet of the right size, files saved whole.

In:  numbers of panels; a finished matplotlib `Figure` (never pyplot) and a path.
Out: an empty figure; PNG and PDF files.
"""

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from gutz import style

_PANEL_WIDTH, _PANEL_HEIGHT = 3.5, 2.9


def save(figure: Figure, path: Path) -> list[Path]:
    """Save as PNG and PDF beside each other, whole or not at all; returns both paths. No dates inside."""
    made = []
    with styled():
        settle(figure)
        figure.set_layout_engine("none")
        for ending, metadata in (
            (".png", {"Software": None}),
            (".pdf", {"CreationDate": None, "Creator": "gutz"}),
        ):
            final = path.with_name(path.name + ending)
            temporary = path.with_name(path.name + ending + ".partial")
            figure.savefig(temporary, format=ending[1:], dpi=style.DPI, metadata=metadata)
            temporary.replace(final)
            made.append(final)
    return made


@contextmanager
def styled() -> Iterator[None]:
    """The house style, for this drawing only. Titles may use scripts the font lacks: boxes are better than nothing."""
    with matplotlib.rc_context(style.RC), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing", category=UserWarning)
        yield


def new_figure(columns: int, rows: int, width: float | None = None) -> Figure:
    """Make an empty figure for a grid of panels, laid out so that texts keep clear of each other."""
    wide = width if width is not None else 1.6 + _PANEL_WIDTH * columns * (1.35 if columns == 1 else 0.85)
    figure = Figure(figsize=(wide, 1.3 + _PANEL_HEIGHT * rows * (1.1 if rows == 1 else 0.9)), dpi=style.DPI)
    FigureCanvasAgg(figure)
    figure.set_layout_engine("constrained", h_pad=0.06, w_pad=0.06)
    return figure


def settle(figure: Figure) -> None:
    """Fix the layout, so that pixels of the panels are known."""
    figure.draw_without_rendering()
