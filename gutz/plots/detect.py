"""Figure of the shots needed against temperature and entropy, with the end of the order marked.

In:  a dataset as `gutz detect` writes it.
Out: a matplotlib `Figure`.
"""

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from gutz import style
from gutz.phases import Phase
from gutz.plots.canvas import new_figure, settle, styled

_COLOURS = {"pair": style.PHASE_COLOURS[Phase.PAIRED], "antipair": style.PHASE_COLOURS[Phase.COUNTERFLOW]}
_WORDS = {"pair": "pair peak, k' = -k", "antipair": "counterflow peak, k' = k"}
_MOST = 1e5
"""Shots above which a curve leaves the figure."""


def draw(dataset: xr.Dataset) -> Figure:
    """Shots against temperature and entropy; or, where an axis of the camera runs, shots and T_det against it."""
    free = [str(d) for d in dataset["shots"].dims if d not in ("T", "channel")]
    with styled():
        figure = new_figure(2, 1, width=8.4)
        left, right = figure.subplots(1, 2, sharey=not free)
        if free:
            _along(left, right, dataset, free[0])
        else:
            _curves(left, right, dataset)
        figure.suptitle(
            style.clean(str(dataset.attrs["title"]), 90), x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False
        )
        settle(figure)
        return figure


def _unit(dataset: xr.Dataset) -> tuple[float, str]:
    factor = float(dataset.attrs["nanokelvin_per_unit"])
    return (factor, "nK") if np.isfinite(factor) else (1.0, str(dataset.attrs["energy_unit"]))


def _ordered(dataset: xr.Dataset) -> list[str]:
    return [c for c in _COLOURS if np.isfinite(dataset["shots"].sel(channel=c).values).any()]


def _curves(left: Axes, right: Axes, dataset: xr.Dataset) -> None:
    factor, unit = _unit(dataset)
    T, entropy = dataset["T"].values * factor, dataset["entropy_per_particle"].values
    allowed = float(dataset.attrs["shots_allowed"])
    for channel in _ordered(dataset):
        one, colour = dataset.sel(channel=channel), _COLOURS[channel]
        shots = np.where(one["shots"].values <= _MOST, one["shots"].values, np.nan)
        ends = float(one["order_ends"]) * factor
        ends_at = float(np.interp(ends, T, entropy)) if np.isfinite(ends) else np.nan
        for panel, x, end in ((left, T, ends), (right, entropy, ends_at)):
            panel.plot(x, shots, color=colour, lw=1.8, marker="o", ms=3)
            if np.isfinite(end):
                panel.axvline(end, color=colour, lw=1.0, ls="--")
                panel.axvspan(end, max(end, np.nanmax(x)), color=style.PHASE_COLOURS[Phase.NORMAL], alpha=0.5, lw=0)
        T_c = float(one["critical_T_c"]) * factor
        if np.isfinite(T_c) and T_c < T.max() * 1.02:
            left.axvline(T_c, color=colour, lw=1.0, ls=":")
            _upright(left, T_c, "T_c, best estimate", colour)
        if np.isfinite(ends):
            _upright(left, ends, "order ends (mean field)", colour, after=True)
            _upright(right, ends_at, "order ends (mean field)", colour, after=True)
        left.set_title(_WORDS[channel], loc="left", color=colour)
    for panel in (left, right):
        panel.axhline(allowed, color=style.PALE_INK, lw=0.8)
        panel.set_yscale("log")
    left.annotate(
        f"{allowed:g} shots", (left.get_xlim()[0], allowed), (4, 3), textcoords="offset points", color=style.PALE_INK,
        size=style.SMALL_SIZE,
    )  # fmt: skip
    left.set_xlabel(style.quantity("Temperature", unit), parse_math=False)
    right.set_xlabel("Entropy per particle (k_B)", parse_math=False)
    left.set_ylabel(f"Shots for {dataset.attrs['significance']:g} standard deviations")
    if not _ordered(dataset):
        left.set_title("no order at these temperatures", loc="left")


def _upright(panel: Axes, x: float, words: str, colour: str, after: bool = False) -> None:
    """Words along a line, before it or after it."""
    panel.annotate(
        words, (x, 0.97), (3 if after else -3, 0), xycoords=("data", "axes fraction"), textcoords="offset points",
        rotation=90, ha="left" if after else "right", va="top", size=style.SMALL_SIZE, color=colour,
    )  # fmt: skip


def _along(left: Axes, right: Axes, dataset: xr.Dataset, name: str) -> None:
    factor, unit = _unit(dataset)
    x = dataset[name].values
    for channel in _ordered(dataset):
        one, colour = dataset.sel(channel=channel), _COLOURS[channel]
        left.plot(x, one["shots"].isel(T=0).values, color=colour, lw=1.8, marker="o", ms=3)
        right.plot(x, one["T_det"].values * factor, color=colour, lw=1.8, marker="o", ms=3)
        T_c = float(one["critical_T_c"]) * factor
        if np.isfinite(T_c):
            right.axhline(T_c, color=colour, lw=1.0, ls=":")
            right.annotate(
                "T_c, best estimate", (x.min(), T_c), (2, 3), textcoords="offset points", color=colour,
                size=style.SMALL_SIZE,
            )  # fmt: skip
        left.set_title(_WORDS[channel], loc="left", color=colour)
    left.set_yscale("log")
    right.set_ylim(bottom=0.0)
    words = style.quantity(str(dataset[name].attrs["long_name"]), str(dataset[name].attrs["units"]))
    for panel in (left, right):
        panel.set_xlabel(words, parse_math=False)
    left.set_ylabel(f"Shots for {dataset.attrs['significance']:g} standard deviations\nat the coldest point")
    right.set_ylabel(
        style.quantity(f"Seen with {dataset.attrs['shots_allowed']:g} shots up to", unit), parse_math=False
    )
