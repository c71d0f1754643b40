"""Figures of clouds: cross-section with labelled shells, loading curve with the phases and the heating margin.

In:  datasets of `gutz.trap.profiles` and `gutz.scan.clouds`.
Out: matplotlib `Figure` objects (never pyplot).
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from numpy.typing import NDArray

from gutz import labels, style
from gutz.phases import WORDS, Phase
from gutz.plots.canvas import new_figure, settle, styled

_CODES = {WORDS[phase]: phase for phase in Phase}
_COLOURS = {int(phase): colour for phase, colour in style.PHASE_COLOURS.items()}
_NAMED = {int(phase): WORDS[phase] for phase in Phase if phase != Phase.VACUUM}


def cross_section(
    profile: xr.Dataset, plane: xr.Dataset | None, columns: xr.Dataset | None, title: str, facts: str
) -> Figure:
    """Draw fillings along the first axis over bands of the phases; the phases in a plane; column densities.

    profile: `profiles.profiles`; plane: `profiles.section`; columns: `profiles.column_density`, the latter two None for
    clouds along one axis. facts: small print.
    """
    with styled():
        lower = plane is not None and columns is not None
        count = 1
        pictures: list[tuple[Any, str]] = []
        if columns is not None and columns["column_density"].ndim == 3:
            density = columns["column_density"].values
            same = density.shape[-1] == 2 and np.allclose(density[..., 0], density[..., 1], rtol=1e-3)
            names = ["each species"] if same else [f"species {k + 1}" for k in range(density.shape[-1])]
            pictures = [(density[..., k], name) for k, name in enumerate(names)]
            count = 1 + len(pictures)
        figure = new_figure(max(2, count), 2 if lower else 1)
        grid = figure.add_gridspec(2 if lower else 1, count)
        top = figure.add_subplot(grid[0, :])
        _bands(top, profile)
        if lower:
            assert plane is not None and columns is not None
            middle = figure.add_subplot(grid[1, 0])
            _plane(middle, plane)
            for k, (values, name) in enumerate(pictures):
                panel = figure.add_subplot(grid[1, 1 + k])
                _picture(figure, panel, columns, values, name)
        if title:
            figure.suptitle(style.clean(title, 90), x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False)
        figure.supxlabel(
            style.clean(facts, 170), x=0.02, ha="left", size=style.SMALL_SIZE, color=style.PALE_INK, parse_math=False
        )
        settle(figure)
        nameless = _name_bands(top, profile)
        if lower and plane is not None:
            named = {int(code) for code in np.unique(profile["phase"].isel(axis=0).values)} - nameless
            nameless |= _name_plane(middle, plane) - named
        _legend(top, nameless)
        return figure


def loading(table: xr.Dataset, axis: str, facts: str) -> Figure:
    """Draw temperature, the share of the atoms in each phase, and entropies against one axis of a table of clouds.

    table: `gutz.scan.clouds.table`, one axis left. The heating margin is the gap between the cloud's entropy and the
    critical one, drawn where it was computed.
    """
    with styled():
        x = table[axis].values.astype(float)
        figure = new_figure(3, 1, width=12.0)
        first, second, third = figure.subplots(1, 3)
        kelvin = np.isfinite(table["temperature_nK"].values).all()
        name = "temperature_nK" if kelvin else "temperature"
        unit = "nK" if kelvin else str(table.attrs.get("energy_unit", "1"))
        first.plot(x, table[name].values, color=style.LINE_COLOURS[0], lw=1.8, marker="o", ms=3)
        first.set_ylabel(style.quantity("Temperature in the lattice", unit), parse_math=False)
        first.set_ylim(bottom=0.0)
        _stack(second, x, table)
        third.plot(x, table["entropy_per_particle"].values, color=style.LINE_COLOURS[0], lw=1.8, label="cloud")
        critical = table["critical_entropy"].values
        if np.isfinite(critical).any():
            third.plot(x, critical, color=style.LINE_COLOURS[1], lw=1.8, ls="--", label=f"{table.attrs['wanted']} gone")
            third.fill_between(
                x, table["entropy_per_particle"].values, critical, color=style.LINE_COLOURS[1], alpha=0.15, lw=0,
                label="heating margin",
            )  # fmt: skip
        third.set_ylim(bottom=0.0)
        third.set_ylabel(style.quantity("Entropy per particle", "k_B"), parse_math=False)
        third.legend(frameon=False, fontsize=style.SMALL_SIZE + 0.5)
        words = style.quantity(str(table[axis].attrs["long_name"]), str(table[axis].attrs["units"]))
        for panel in (first, second, third):
            panel.set_xlim(float(x.min()), float(x.max()))
            panel.set_xlabel(words, parse_math=False)
        title = style.clean(str(table.attrs.get("title", "")), 90)
        if title:
            figure.suptitle(title, x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False)
        figure.supxlabel(
            style.clean(facts, 190), x=0.02, ha="left", size=style.SMALL_SIZE, color=style.PALE_INK, parse_math=False
        )
        settle(figure)
        return figure


def _bands(panel: Axes, profile: xr.Dataset) -> None:
    """Fillings along the first axis, phases behind them."""
    along = profile.isel(axis=0)
    x, codes = along["position"].values, along["phase"].values
    filling = along["filling"].values
    top = 1.15 * float(max(filling.sum(-1).max(), 1e-6))
    edges = _edges(x)
    for begin, end in _runs(codes):
        panel.axvspan(edges[begin], edges[end], color=_COLOURS[int(codes[begin])], lw=0, zorder=0)
    for k in range(filling.shape[-1]):
        panel.plot(x, filling[:, k], color=style.PAPER, lw=3.4, zorder=3)
        panel.plot(
            x, filling[:, k], color=style.INK, lw=1.6, ls=style.LINE_STYLES[k], zorder=4, label=f"species {k + 1}"
        )
    if filling.shape[-1] == 2:
        panel.plot(x, filling.sum(-1), color=style.PAPER, lw=3.0, zorder=3)
        panel.plot(x, filling.sum(-1), color=style.INK, lw=1.0, ls=":", zorder=4, label="both")
    panel.set_xlim(float(x[0]), float(x[-1]))
    panel.set_ylim(0.0, top)
    name = str(profile["axis"].values[0])
    panel.set_xlabel(f"Position along {name} in sites", parse_math=False)
    panel.set_ylabel("Filling", parse_math=False)
    if filling.shape[-1] == 2:
        panel.legend(
            frameon=True, framealpha=0.85, edgecolor="none", fontsize=style.SMALL_SIZE + 0.5, loc="upper right"
        )


def _plane(panel: Axes, plane: xr.Dataset) -> None:
    names = _positions(plane)
    x, y = plane[names[0]].values, plane[names[1]].values
    kinds = [*Phase]
    norm = BoundaryNorm(np.arange(len(kinds) + 1) - 0.5 + int(kinds[0]), len(kinds))
    colours = ListedColormap([style.PHASE_COLOURS[phase] for phase in kinds])
    panel.pcolormesh(_edges(x), _edges(y), plane["phase"].values.T, cmap=colours, norm=norm, rasterized=True)
    _square(panel, plane, names)
    panel.set_title("phases in the middle plane", loc="left", parse_math=False)


def _picture(figure: Figure, panel: Axes, columns: xr.Dataset, values: NDArray[np.float64], name: str) -> None:
    names = _positions(columns)
    x, y = columns[names[0]].values, columns[names[1]].values
    drawn = panel.pcolormesh(_edges(x), _edges(y), values.T, cmap=style.RAMP, vmin=0.0, rasterized=True)
    _square(panel, columns, names)
    panel.set_title(f"column density, {name}", loc="left", parse_math=False)
    bar = figure.colorbar(drawn, ax=panel, pad=0.02, aspect=25)
    bar.outline.set_visible(False)
    bar.set_label("Atoms per column", parse_math=False)


def _square(panel: Axes, dataset: xr.Dataset, names: Sequence[str]) -> None:
    panel.set_aspect("equal")
    panel.set_xlabel(f"{names[0][-1]} in sites", parse_math=False)
    panel.set_ylabel(f"{names[1][-1]} in sites", parse_math=False)


def _positions(dataset: xr.Dataset) -> list[str]:
    return [str(d) for d in dataset.dims if str(d).startswith("position_")]


def _stack(panel: Axes, x: NDArray[np.float64], table: xr.Dataset) -> None:
    """Shares of the atoms by phase, stacked, each named in its band where that is wide enough, else in a legend."""
    words = [str(w) for w in table["phase"].values]
    shares = table["fraction"].values
    used = [k for k in range(len(words)) if shares[:, k].max() > 0.005]
    base = np.zeros(x.size)
    handles = []
    for k in used:
        colour = style.PHASE_COLOURS[_CODES[words[k]]]
        panel.fill_between(x, base, base + shares[:, k], color=colour, lw=0)
        at = int(shares[:, k].argmax())
        if shares[at, k] > 0.13 and 0.15 < (x[at] - x.min()) / max(float(np.ptp(x)), 1e-300) < 0.85:
            panel.text(
                x[at], base[at] + shares[at, k] / 2, words[k], ha="center", va="center", color=style.ink_on(colour),
                size=style.SMALL_SIZE + 0.5, parse_math=False,
            )  # fmt: skip
        else:
            handles.append(Patch(facecolor=colour, edgecolor=style.INK, lw=0.5, label=words[k]))
        base = base + shares[:, k]
    panel.set_ylim(0.0, 1.0)
    panel.set_ylabel("Share of the atoms", parse_math=False)
    if handles:
        panel.legend(handles=handles, fontsize=style.SMALL_SIZE + 0.5, framealpha=0.85, edgecolor="none")


def _name_bands(panel: Axes, profile: xr.Dataset) -> set[int]:
    """Name the bands near the top of the panel; returns the phases too narrow for words."""
    along = profile.isel(axis=0)
    across, up = labels.pixel_grid(panel)
    x, codes = along["position"].values, along["phase"].values
    row = codes[np.clip(np.searchsorted(_edges(x), across) - 1, 0, x.size - 1)]
    pixels = np.broadcast_to(row, (up.size, row.size)).copy()
    filling = along["filling"].values
    highest = np.interp(across, x, filling.sum(-1))
    # Words keep clear of the lines.
    lines = [np.interp(across, x, filling[:, k]) for k in range(filling.shape[-1])] + [highest]
    height = up[-1] - up[0]
    for line in lines:
        pixels[np.abs(up[:, None] - line[None, :]) < 0.02 * height] = -99
    pixels[:, across > x[-1] - 0.16 * np.ptp(x)] = np.where(
        up[:, None] > up[-1] - 0.3 * height, -99, pixels[:, across > x[-1] - 0.16 * np.ptp(x)]
    )
    return set(labels.place(panel, pixels, _NAMED, _COLOURS))


def _name_plane(panel: Axes, plane: xr.Dataset) -> set[int]:
    names = _positions(plane)
    across, up = labels.pixel_grid(panel)
    x, y = plane[names[0]].values, plane[names[1]].values
    i = np.clip(np.searchsorted(_edges(x), across) - 1, 0, x.size - 1)
    j = np.clip(np.searchsorted(_edges(y), up) - 1, 0, y.size - 1)
    return set(labels.place(panel, plane["phase"].values.T[np.ix_(j, i)], _NAMED, _COLOURS))


def _legend(panel: Axes, left: set[int]) -> None:
    """Phases that found no room for their names."""
    if not left:
        return
    patches = [Patch(facecolor=_COLOURS[c], edgecolor=style.INK, lw=0.5, label=_NAMED[c]) for c in sorted(left)]
    before = panel.get_legend()
    legend = panel.legend(
        handles=patches, loc="lower center", framealpha=0.85, edgecolor="none", fontsize=style.SMALL_SIZE + 0.5
    )
    if before is not None:
        panel.add_artist(before)
    legend.set_zorder(7)


def _edges(values: NDArray[np.float64]) -> NDArray[np.float64]:
    inner = (values[1:] + values[:-1]) / 2
    return np.concatenate([[2 * values[0] - inner[0]], inner, [2 * values[-1] - inner[-1]]])


def _runs(codes: NDArray[np.integer]) -> list[tuple[int, int]]:
    starts = np.flatnonzero(np.diff(codes, prepend=codes[0] - 1))
    return list(zip(starts.tolist(), [*starts[1:].tolist(), codes.size], strict=True))
