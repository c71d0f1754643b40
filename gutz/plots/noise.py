"""Figures of noise maps: the whole map of a chain, or the lines of a square or cubic lattice.

In:  a dataset of `gutz.noise.noise_map` at one point (no batch axes).
Out: a matplotlib `Figure`: maps 11, 22, 12 and n(k) in 1D; averages over k against Q, lines and n(k) otherwise.

Colours run from brown (fewer coincidences than chance) over white (as many) to blue (more).
"""

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.colors import Normalize, SymLogNorm, TwoSlopeNorm
from matplotlib.figure import Figure
from numpy.typing import NDArray

from gutz import style
from gutz.plots import canvas

Floats = NDArray[np.float64]

_LINEAR_SHARE = 1e-3
_TICKS = (-np.pi, 0.0, np.pi)
_TICK_WORDS = ("−π", "0", "π")


def draw(dataset: xr.Dataset, title: str = "", log: bool = False) -> Figure:
    """Draw one point. log: logarithmic scales (maps: linear within a thousandth of the largest value)."""
    with canvas.styled():
        return _draw_maps(dataset, title, log) if "noise" in dataset else _draw_lines(dataset, title, log)


def _pairs(dataset: xr.Dataset) -> list[tuple[int, int]]:
    return [(0, 0)] if dataset.sizes["species"] == 1 else [(0, 0), (1, 1), (0, 1)]


def _draw_maps(dataset: xr.Dataset, title: str, log: bool) -> Figure:
    pairs = _pairs(dataset)
    columns = 2
    figure = canvas.new_figure(columns, 1 if len(pairs) == 1 else 2, width=8.6)
    axes = figure.subplots(1 if len(pairs) == 1 else 2, columns, squeeze=False).ravel()
    density = dataset["momentum_distribution"].mean("k").values
    k = _first_zone(dataset["k"].values)
    edges = np.concatenate([k, [k[-1] + k[1] - k[0]]]) - 0.5 * (k[1] - k[0])
    for panel, (a, b) in zip(axes, pairs, strict=False):
        # In units of the mean densities, so that 1 is full contrast; each map has its own scale, always white at zero.
        value = _centred(dataset["noise"].values[a, b] / (density[a] * density[b]), (0, 1))
        norm = _norm(value, log)
        mesh = panel.pcolormesh(edges, edges, value.T, cmap=style.BALANCE, norm=norm, rasterized=True)
        bar = figure.colorbar(mesh, ax=panel, shrink=0.85, aspect=25, pad=0.02)
        bar.outline.set_visible(False)
        panel.set_aspect("equal")
        _name_lines(panel, k, value)
        panel.set_title(f"C{a + 1}{b + 1}(k, k′) / n{a + 1} n{b + 1}", loc="left")
        panel.set_xlabel("k (1/a)")
        panel.set_ylabel("k′ (1/a)")
        _momentum_ticks(panel, both=True)
    _draw_distribution(axes[len(pairs)], dataset, k, log)
    _finish(figure, dataset, title)
    return figure


def _draw_lines(dataset: xr.Dataset, title: str, log: bool) -> Figure:
    figure = canvas.new_figure(2, 2, width=8.6)
    axes = figure.subplots(2, 2).ravel()
    density = dataset["momentum_distribution"].mean([d for d in dataset.dims if str(d).startswith("k_")]).values
    cut = {d: 0 for d in dataset["momentum_distribution"].dims if d not in ("species", "k_x")}
    Q, k = _first_zone(dataset["Q"].values), _first_zone(dataset["k_x"].values)
    pairs = _pairs(dataset)
    for panel, name, words in (
        (axes[0], "sum_correlation", "k′ = −k + Q, mean over k"),
        (axes[1], "difference_correlation", "k′ = k + Q, mean over k"),
    ):
        lines = {
            pair: _centred(dataset[name].values[pair] / (density[pair[0]] * density[pair[1]]), (0,)) for pair in pairs
        }
        _draw_pairs(panel, Q, lines, log)
        panel.set_title(words, loc="left")
        panel.set_xlabel("Q along x (1/a)")
    for name, dashes, sign in (("sum_line", "-", "−"), ("difference_line", "--", "")):
        for number, (a, b) in enumerate(pairs):
            values = dataset[name].isel(cut).values[a, b] / (density[a] * density[b])
            values = _centred(values, (0,))
            # k = 0 is the condensate's, and drowns the rest; where k = -k both channels meet.
            values[[0, len(k) // 2] if len(k) % 2 == 0 else [len(k) // 2]] = np.nan
            axes[2].plot(k, values, dashes, color=style.LINE_COLOURS[number], lw=2.6 - 0.8 * number)
            if number == len(pairs) - 1:
                _label_end(axes[2], k, values, f"k′ = {sign}k", style.INK)
    axes[2].set_title("C(k, ±k) along x", loc="left")
    axes[2].set_xlabel("k along x (1/a)")
    axes[2].axhline(0.0, color=style.PALE_INK, lw=0.6)
    _momentum_ticks(axes[2], both=False)
    _draw_distribution(axes[3], dataset.isel(cut), k, log)
    low, high = zip(*(panel.get_ylim() for panel in axes[:2]), strict=True)
    for panel in axes[:2]:
        panel.set_ylim(min(low), max(high))
    for panel in axes[:3]:
        panel.set_ylabel("C / n n")
        if log:
            panel.set_yscale("symlog", linthresh=1e-4)
    _finish(figure, dataset, title)
    return figure


def _draw_pairs(panel: Axes, x: Floats, lines: dict[tuple[int, int], Floats], log: bool) -> None:
    middle = len(x) // 2
    for number, ((a, b), values) in enumerate(lines.items()):
        colour = style.LINE_COLOURS[number]
        panel.plot(x, values, color=colour, lw=2.6 - 0.8 * number)
        panel.annotate(
            f"{a + 1}{b + 1}", (x[middle], values[middle]), xytext=(8 + 16 * number, 2), color=colour,
            textcoords="offset points", size=style.SMALL_SIZE + 1, va="bottom",
        )  # fmt: skip
    panel.axhline(0.0, color=style.PALE_INK, lw=0.6)
    _momentum_ticks(panel, both=False)


def _draw_distribution(panel: Axes, dataset: xr.Dataset, k: Floats, log: bool) -> None:
    values = dataset["momentum_distribution"].values
    for a in range(len(values)):
        line = _centred(values[a], (0,))
        panel.plot(k, line, style.LINE_STYLES[a], color=style.LINE_COLOURS[a], lw=1.5)
        if len(values) > 1:
            _label_end(panel, k, line, f"species {a + 1}", style.LINE_COLOURS[a], lift=-2 if a else 5)
    if log or values.max() > 50 * np.median(values):
        panel.set_yscale("log")
    else:
        panel.set_ylim(bottom=0.0)
    panel.set_title("momentum distribution n(k)", loc="left")
    panel.set_xlabel("k (1/a)" if "k" in dataset.dims else "k along x (1/a)")
    _momentum_ticks(panel, both=False)


def _label_end(panel: Axes, x: Floats, y: Floats, words: str, colour: str, lift: float = 3) -> None:
    at = int(0.8 * len(x))
    if np.isfinite(y[at]):
        panel.annotate(
            words, (x[at], y[at]), xytext=(0, lift), textcoords="offset points", color=colour,
            size=style.SMALL_SIZE, va="bottom" if lift > 0 else "top",
        )  # fmt: skip


def _name_lines(panel: Axes, k: Floats, value: Floats) -> None:
    """Write the condition of each line that stands out beside it, at a quarter of the zone."""
    length = len(k)
    index = np.arange(length)
    at = length // 2 + max(1, length // 5)
    typical = float(np.median(np.abs(value)))
    strong = max(10.0 * typical, 0.02 * float(np.sort(np.abs(value).ravel())[-length]))
    for words, entries, corner in (
        ("k′ = k", value[index, index], (k[at], k[at])),
        ("k′ = −k", value[index, _negative(length)], (k[at], -k[at])),
    ):
        if np.median(np.abs(entries)) > strong:
            panel.annotate(
                words, corner, xytext=(-6 if corner[1] > 0 else 6, 4), textcoords="offset points",
                ha="right" if corner[1] > 0 else "left", va="bottom", size=style.SMALL_SIZE, color=style.INK,
            )  # fmt: skip


def _negative(length: int) -> NDArray[np.int64]:
    """Position of -k in a grid from -π to π."""
    return (2 * (length // 2) - np.arange(length)) % length


def _norm(value: Floats, log: bool) -> Normalize:
    """White at zero; single entries (the condensate) do not set the scale."""
    flat = np.abs(value).ravel()
    largest = float(np.sort(flat)[-max(1, min(value.shape) // 2)])
    largest = largest if largest > 0 else 1.0
    if log:
        return SymLogNorm(linthresh=_LINEAR_SHARE * largest, vmin=-largest, vmax=largest)
    return TwoSlopeNorm(0.0, -largest, largest)


def _first_zone(k: Floats) -> Floats:
    """Momenta from -π to π for a grid from 0 to 2π."""
    length = len(k)
    return 2.0 * np.pi * (np.arange(length) - length // 2) / length


def _centred(values: Floats, axes: tuple[int, ...]) -> Floats:
    return np.roll(values, [values.shape[axis] // 2 for axis in axes], axes)


def _momentum_ticks(panel: Axes, both: bool) -> None:
    panel.set_xticks(_TICKS, _TICK_WORDS)
    if both:
        panel.set_yticks(_TICKS, _TICK_WORDS)


def _finish(figure: Figure, dataset: xr.Dataset, title: str) -> None:
    words = [style.clean(title)] if title else []
    marks = dataset["validity"].attrs["flag_meanings"].split()
    grade = int(dataset["validity"])
    if grade > 0:
        words.append(f"validity: {marks[grade]}")
    figure.suptitle("   ".join(words), x=0.01, ha="left", size=style.TITLE_SIZE, parse_math=False)
