"""Figures of noise maps: the whole map of a chain, or the lines of a square or cubic lattice.

In:  a dataset of `gutz.noise.noise_map` at one point (no batch axes).
Out: a matplotlib `Figure`: maps 11, 22, 12 and n(k) in 1D; averages over k against Q, lines and n(k) otherwise.

Colours run from brown (fewer coincidences than chance) over white (none) to blue (more), the same for all maps.
"""

from typing import Any

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
    values = []
    for a, b in pairs:
        # In units of the mean densities, so that 1 is full contrast in every panel.
        values.append(_centred(dataset["noise"].values[a, b] / (density[a] * density[b]), (0, 1)))
    norm = _norm(values, log)
    k = _first_zone(dataset["k"].values)
    edges = np.concatenate([k, [k[-1] + k[1] - k[0]]]) - 0.5 * (k[1] - k[0])
    mesh: Any = None
    for panel, (a, b), value in zip(axes, pairs, values, strict=False):
        mesh = panel.pcolormesh(edges, edges, value.T, cmap=style.BALANCE, norm=norm, rasterized=True)
        panel.set_aspect("equal")
        panel.set_title(f"C{a + 1}{b + 1}(k, k′) / n{a + 1} n{b + 1}", loc="left")
        panel.set_xlabel("k (1/a)")
        panel.set_ylabel("k′ (1/a)")
        _momentum_ticks(panel, both=True)
    bar = figure.colorbar(mesh, ax=list(axes[: len(pairs)]), shrink=0.8, aspect=30)
    bar.outline.set_visible(False)
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
            axes[2].plot(k, values, dashes, color=style.LINE_COLOURS[number], lw=1.3)
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
        panel.plot(x, values, color=colour, lw=1.3)
        panel.annotate(
            f"{a + 1}{b + 1}", (x[middle], values[middle]), xytext=(6 + 14 * number, -2), color=colour,
            textcoords="offset points", size=style.SMALL_SIZE + 1, va="top",
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


def _norm(values: list[Floats], log: bool) -> Normalize:
    """One scale for all maps, white at zero; single entries (the condensate) do not set it."""
    flat = np.abs(np.concatenate([v.ravel() for v in values]))
    shape = values[0].shape
    largest = float(np.sort(flat)[-max(1, min(shape) // 2)])
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
