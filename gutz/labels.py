"""Puts names inside the regions of a map, so that no legend is needed and nothing overlaps.

In:  drawn axes, and an integer label for every pixel of a grid laid over them.
Out: texts added to the axes, each wholly inside the largest connected piece of its region; and the labels of
     regions too small for words.
"""

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from numpy.typing import NDArray
from scipy import ndimage

from gutz.style import LABEL_SIZES, ink_on

MARGIN = 4
"""Pixels kept free around a name."""


def place(axes: Axes, pixels: NDArray[np.integer], words: Mapping[int, str], colours: Mapping[int, str]) -> list[int]:
    """Write a name into every region of `pixels`, shape (row, column), first row at the bottom of the axes.

    words, colours: by label; labels without words stay unnamed. Returns those whose regions are too small.
    """
    failed = []
    for value in np.unique(pixels).tolist():
        if value not in words:
            continue
        region = _largest_piece(pixels == value)
        if not _write(axes, region, words[value], ink_on(colours[value])):
            failed.append(value)
    return failed


def pixel_grid(axes: Axes) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Data coordinates of the axes' pixel columns and rows; the layout must be settled."""
    box = axes.get_window_extent()
    columns, rows = max(1, int(box.width)), max(1, int(box.height))
    inverse = axes.transData.inverted()
    x = inverse.transform([(box.x0 + i + 0.5, box.y0) for i in range(columns)])[:, 0]
    y = inverse.transform([(box.x0, box.y0 + j + 0.5) for j in range(rows)])[:, 1]
    return x, y


def _largest_piece(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    pieces, count = ndimage.label(mask)
    if count <= 1:
        return mask
    sizes = np.bincount(pieces.ravel())
    sizes[0] = 0
    return np.asarray(pieces == sizes.argmax())


def _write(axes: Axes, region: NDArray[np.bool_], words: str, ink: str) -> bool:
    """Try sizes from large to small, level before upright, one line before two; True if one fits."""
    rows, columns = region.shape
    renderer = FigureCanvasAgg(axes.figure).get_renderer()  # type: ignore[no-untyped-call,arg-type]
    for size in LABEL_SIZES:
        for angle in (0, 90):
            for shape in (words, _two_lines(words)):
                text = axes.text(
                    0, 0, shape, size=size, rotation=angle, color=ink, ha="center", va="center",
                    transform=axes.transAxes, parse_math=False, zorder=6,
                )  # fmt: skip
                box = text.get_window_extent(renderer)
                spot = _spot(region, int(box.height) + 2 * MARGIN, int(box.width) + 2 * MARGIN)
                if spot is not None:
                    text.set_position(((spot[1] + 0.5) / columns, (spot[0] + 0.5) / rows))
                    return True
                text.remove()
    return False


def _spot(region: NDArray[np.bool_], height: int, width: int) -> tuple[int, int] | None:
    """The centre of a rectangle inside the region, well away from where it no longer fits; or None."""
    if height >= region.shape[0] or width >= region.shape[1]:
        return None
    sums = np.pad(region, ((1, 0), (1, 0))).cumsum(0).cumsum(1)
    filled = sums[height:, width:] - sums[:-height, width:] - sums[height:, :-width] + sums[:-height, :-width]
    fits = filled == height * width
    if not fits.any():
        return None
    room = ndimage.distance_transform_edt(np.pad(fits, 1))[1:-1, 1:-1]
    # Among the roomy places, the one nearest the middle of the region.
    roomy = np.argwhere(room >= 0.7 * room.max())
    middle = np.argwhere(region).mean(0) - (height / 2, width / 2)
    row, column = roomy[((roomy - middle) ** 2).sum(1).argmin()]
    return int(row) + height // 2, int(column) + width // 2


def _two_lines(words: str) -> str:
    """Break a name near its middle; single words stay whole."""
    breaks = [i for i, mark in enumerate(words) if mark == " "]
    if not breaks:
        return words
    middle = min(breaks, key=lambda i: abs(i - len(words) / 2))
    return words[:middle] + "\n" + words[middle + 1 :]
