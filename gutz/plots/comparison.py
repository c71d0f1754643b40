"""The figure of the comparison: phase diagrams of chains, shaded by how wrong mean field is, references marked.

In:  the dataset of the whole stored set as `gutz.comparison.compare` returns it; points to mark, if any.
Out: a matplotlib `Figure` (never pyplot). One row per ansatz: one species on the left, against t/U and mu/U; two
     species with half an atom each per site on the right, against t/U and U12/U.

Colour is the overall error: light is right, dark is wrong, hatched is unknown. Inside a Mott lobe nothing depends on
mu, so the shade there follows the references of the lobe along t/U alone.
"""

from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from gutz import style
from gutz.comparison.places import HARD_CORE, Places, distances
from gutz.comparison.references import NEARBY
from gutz.comparison.verdicts import QUALITATIVE, QUANTITATIVE, Verdict
from gutz.phases import WORDS, Phase
from gutz.plots.canvas import new_figure, settle, styled

Floats = NDArray[np.float64]

_GRID = 160
_ONE = {"t": (0.0, 0.56), "y": (-0.55, 1.25)}
_TWO = {"t": (0.0, 0.30), "y": (-1.05, 1.05)}
_MU_STEP = 0.25
"""Change of mu/U that counts as a distance of 1."""

_RING = style.LINE_COLOURS[1]
_MARKERS = {Verdict.QUANTITATIVE: "o", Verdict.QUALITATIVE: "^", Verdict.WRONG: "X", Verdict.NOT_JUDGED: "."}
_MEANINGS = {
    Verdict.QUANTITATIVE: "quantitative",
    Verdict.QUALITATIVE: "qualitative",
    Verdict.WRONG: "wrong",
}


def draw(stored: xr.Dataset, points: xr.Dataset | None = None) -> Figure:
    """Draw the stored set. points: a comparison of other points, marked with a ring where the panel holds them."""
    ansaetze = [str(a) for a in stored["ansatz"].values]
    with styled():
        figure = new_figure(2, len(ansaetze), width=9.0)
        grid = figure.subplots(len(ansaetze), 2, squeeze=False)
        meshes = []
        for row, ansatz in enumerate(ansaetze):
            one = stored.sel(ansatz=ansatz)
            meshes.append(_one_species(grid[row, 0], one))
            _two_species(grid[row, 1], one)
            grid[row, 0].set_title(f"{ansatz} ansatz: one species", loc="left")
            grid[row, 1].set_title(f"{ansatz} ansatz: two species, ½ atom each", loc="left")
            if points is not None:
                _mark(grid[row, 0], grid[row, 1], points)
        bar = figure.colorbar(meshes[-1], ax=list(grid.ravel()), pad=0.015, aspect=35)
        bar.outline.set_visible(False)
        bar.set_ticks([0, QUANTITATIVE, QUALITATIVE, 1.0], labels=["0", "0.1", "0.5", "1"])
        bar.set_label("Overall error of mean field (dark: do not believe; hatched: no reference nearby)")
        _legend(figure, rings=points is not None)
        settle(figure)
        return figure


def _legend(figure: Figure, rings: bool) -> None:
    from_lines = [_proxy(marker=_MARKERS[verdict], label=f"reference: {words}") for verdict, words in _MEANINGS.items()]
    lines = [
        _proxy(linestyle="-", label="edge of the Mott lobe, references"),
        _proxy(linestyle="--", label="edge of the Mott lobe, bare mean field"),
    ]
    if rings:
        lines.append(_proxy(marker="o", markerfacecolor="none", markeredgecolor=_RING, markeredgewidth=2.0,
                            markersize=10, label="points asked about"))  # fmt: skip
    figure.legend(handles=[*from_lines, *lines], loc="outside lower left", ncols=3, frameon=False,
                  fontsize=style.SMALL_SIZE + 0.5)  # fmt: skip


def _proxy(**looks: Any) -> Any:
    from_matplotlib = {"color": style.INK, "linestyle": "none", "markersize": 6, **looks}
    return Line2D([], [], **from_matplotlib)


def _one_species(panel: Axes, stored: xr.Dataset) -> Any:
    """Error in the plane of t/U and mu/U, from soft-core one-species chains at T = 0."""
    keep = (
        (stored["species_count"] == 1) & (stored["T_over_t"] == 0)
        & np.isfinite(stored["U_over_t"]) & np.isfinite(stored["mu"])
    )  # fmt: skip
    some = stored.isel(entry=np.flatnonzero(keep.values))
    strength = some["U_over_t"].values
    x, y = 1 / strength, some["mu"].values / strength
    mott = some["reference"].sel(observable="phase").values == Phase.MOTT
    filling, error = some["filling_1"].values, some["overall_error"].values
    t_axis = np.linspace(max(_ONE["t"][0], 1e-3), _ONE["t"][1], _GRID)
    y_axis = np.linspace(*_ONE["y"], _GRID)
    gx, gy = np.meshgrid(t_axis, y_axis)
    interaction = _interaction(1 / gx)
    values = _shepard(
        np.hypot(interaction[..., None] - _interaction(strength[~mott]), (gy[..., None] - y[~mott]) / _MU_STEP),
        error[~mott],
    )
    for n in np.unique(filling[mott]):
        lobe = mott & (filling == n)
        edges = _lobe(some, lobe)
        lower, upper = (np.interp(gx, edges[0], side, left=side[0], right=np.nan) for side in edges[1:])
        inside = (gy > lower) & (gy < upper)
        along = _shepard(np.abs(interaction[inside][:, None] - _interaction(strength[lobe])), error[lobe])
        values[inside] = along
        panel.plot(np.r_[edges[0], edges[0][::-1]], np.r_[edges[1], edges[2][::-1]], color=style.INK, lw=1.4, zorder=4)
        _bare_lobe(panel, float(n))
        _name(panel, 0.13, float(n) - 0.28, f"Mott insulator, n = {n:g}", to=(0.075, float(n) - 0.4))
    values[gy < -2 * gx] = np.nan
    mesh = _shade(panel, t_axis, y_axis, values)
    panel.fill_between(t_axis, np.full(_GRID, _ONE["y"][0]), -2 * t_axis, color=style.PAPER, zorder=3, lw=0)
    panel.text(0.03, _ONE["y"][0] + 0.08, "empty", color=style.PALE_INK, zorder=6)
    _name(panel, 0.44, -0.42, "superfluid")
    _points(panel, x, y, error, some["overall"].values)
    panel.set(xlim=_ONE["t"], ylim=_ONE["y"], xlabel="t / U", ylabel="Chemical potential μ / U")
    return mesh


def _lobe(some: xr.Dataset, lobe: NDArray[np.bool_]) -> tuple[Floats, Floats, Floats]:
    """Edges of a lobe from its references: t/U, lower and upper mu/U; at t = 0 the exact values."""
    strength = some["U_over_t"].values[lobe]
    order = np.argsort(1 / strength)
    n = float(some["filling_1"].values[lobe][0])
    lower = some["mu"].values[lobe] - some["gap"].values[lobe] / 2
    upper = some["mu"].values[lobe] + some["gap"].values[lobe] / 2
    x = np.r_[0.0, (1 / strength)[order]]
    return x, np.r_[n - 1, (lower / strength)[order]], np.r_[n, (upper / strength)[order]]


def _bare_lobe(panel: Axes, n: float) -> None:
    """z t/U = (n - m)(m - n + 1)/(1 + m), m = mu/U: the product ansatz without regard to dimension, z = 2."""
    m = np.linspace(n - 1, n, 200)
    panel.plot((n - m) * (m - n + 1) / (1 + m) / 2, m, color=style.INK, lw=1.2, ls="--", zorder=4)


def _two_species(panel: Axes, stored: xr.Dataset) -> None:
    """Error in the plane of t/U and U12/U for like species, half an atom each, T = 0."""
    soft = (stored["species_count"] == 2) & (stored["T_over_t"] == 0) & np.isfinite(stored["U_over_t"])
    alike = (np.abs(stored["filling_1"] - 0.5) < 1e-9) & (np.abs(stored["filling_2"] - 0.5) < 1e-9)
    some = stored.isel(entry=np.flatnonzero((soft & alike & (stored["t2_over_t"] == 1)).values))
    error = some["overall_error"].values
    x, y = 1 / some["U_over_t"].values, some["U12_over_t"].values / some["U_over_t"].values
    widest = min(_TWO["t"][1], 1.4 * max(x, default=0.1))
    t_axis = np.linspace(max(_TWO["t"][0], 2e-3), widest, _GRID)
    y_axis = np.linspace(*_TWO["y"], _GRID)
    gx, gy = np.meshgrid(t_axis, y_axis)
    values = np.full(gx.shape, np.nan)
    if error.size:
        far = distances(_half_filled(1 / gx.ravel(), (gy / gx).ravel()),
                        _half_filled(some["U_over_t"].values, some["U12_over_t"].values))  # fmt: skip
        values = _shepard(far, error).reshape(gx.shape)
    _shade(panel, t_axis, y_axis, values)
    _points(panel, x, y, error, some["overall"].values)
    phases = some["reference"].sel(observable="phase").values
    for phase, place in ((Phase.COUNTERFLOW, 0.07), (Phase.PAIRED, -0.07)):
        if (phases == phase).any():
            _name(panel, 0.03 * widest, place, f"{'↑' if place > 0 else '↓'} {WORDS[phase]}")
    panel.axhline(0, color=style.PALE_INK, lw=0.6, zorder=3)
    panel.set(xlim=(0, widest), ylim=_TWO["y"], xlabel="t / U", ylabel="Between the species: U12 / U")


def _half_filled(strength: Floats, cross: Floats) -> Places:
    size = len(strength)
    return Places(
        t=np.ones((size, 2)),
        U=np.repeat(strength[:, None], 2, axis=1),
        U12=cross,
        filling=np.full((size, 2), 0.5),
        T=np.zeros(size),
        hard_core=np.zeros(size, bool),
    )


def _interaction(strength: Floats) -> Floats:
    """The coordinate of U/t in which distances are measured (one species, as in `Places`)."""
    flat = np.ravel(strength)
    size = len(flat)
    places = Places(
        np.ones((size, 1)), np.minimum(flat, HARD_CORE)[:, None], np.zeros(size), np.ones((size, 1)), np.zeros(size),
        np.zeros(size, bool),
    )  # fmt: skip
    return places.coordinates()[:, 0].reshape(np.shape(strength))


def _shepard(far: Floats, errors: Floats) -> Floats:
    """Means weighted by 1/d^2 over references within reach; nan where there is none. far: (..., references)."""
    weights = np.where(far <= NEARBY, 1 / np.maximum(far, 1e-3) ** 2, 0.0)
    total = weights.sum(-1)
    mean: Floats = np.where(total > 0, weights @ errors / np.where(total > 0, total, 1), np.nan)
    return mean


def _shade(panel: Axes, x: Floats, y: Floats, values: Floats) -> Any:
    """Colours where something is known, hatching where not."""
    panel.set_facecolor(style.PAPER)
    unknown = np.isnan(values)
    if unknown.any():
        panel.contourf(x, y, unknown.astype(float), levels=[0.5, 1.5], colors=[style.PAPER], hatches=[style.HATCH],
                       zorder=1)  # fmt: skip
    shown = np.ma.masked_invalid(values)
    return panel.pcolormesh(x, y, shown, cmap=style.RAMP, vmin=0, vmax=1, shading="nearest", zorder=2, rasterized=True)


def _name(panel: Axes, x: float, y: float, words: str, to: tuple[float, float] | None = None) -> None:
    """Words on paper, with a thin line to what they name where they stand beside it."""
    box = {"facecolor": style.PAPER, "edgecolor": "none", "pad": 1.5, "alpha": 0.85}
    arrow = {"arrowstyle": "-", "color": style.INK, "lw": 0.8}
    panel.annotate(words, to or (x, y), xytext=(x, y), color=style.INK, bbox=box, zorder=8, va="center",
                   arrowprops=arrow if to else None)  # fmt: skip


def _points(panel: Axes, x: Floats, y: Floats, errors: Floats, codes: NDArray[Any]) -> None:
    for verdict, marker in _MARKERS.items():
        at = codes == verdict
        if at.any():
            panel.scatter(x[at], y[at], c=errors[at], cmap=style.RAMP, vmin=0, vmax=1, marker=marker, s=52,
                          edgecolors=style.INK, linewidths=1.0, zorder=5)  # fmt: skip


def _mark(left: Axes, right: Axes, points: xr.Dataset) -> None:
    """Rings around the points asked about, in the panel of their number of species (right: where they fit in)."""
    if "U_over_t" not in points.coords:
        return
    strength, cross = points["U_over_t"].values, points["U12_over_t"].values
    two = points["species_count"].values == 2
    fits = two & np.isfinite(strength) & (np.abs(points["filling_1"].values - 0.5) < 0.02)
    if fits.any():
        right.scatter(1 / strength[fits], (cross / strength)[fits], s=150, facecolors="none", edgecolors=_RING,
                      linewidths=2.0, zorder=7)  # fmt: skip
    if "mu" in points and (~two).any():
        some = ~two & np.isfinite(points["mu"].values)
        left.scatter(1 / strength[some], points["mu"].values[some] / strength[some], s=150, facecolors="none",
                     edgecolors=_RING, linewidths=2.0, zorder=7)  # fmt: skip
