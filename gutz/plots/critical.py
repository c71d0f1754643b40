"""Figure of critical temperature and entropy along an axis.

In:  a dataset as `gutz critical` writes it.
Out: a matplotlib `Figure`.
"""

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from gutz import style
from gutz.plots.canvas import new_figure, settle, styled

_WHAT = {"single": "single atoms", "pair": "pairs", "antipair": "anti-pairs"}


def draw(dataset: xr.Dataset) -> Figure:
    """Best and bare estimates of T_c above, of the entropy per particle at T_c below."""
    axis = str(next(iter(dataset.dims)))
    with styled():
        figure = new_figure(1, 2, width=6.4)
        upper, lower = figure.subplots(2, 1, sharex=True)
        _pair(upper, dataset, axis, "T_c", "T_c_bare")
        _pair(lower, dataset, axis, "entropy_per_particle", "entropy_bare")
        unit = str(dataset["T_c"].attrs["units"])
        upper.set_ylabel(style.quantity("Critical temperature", unit), parse_math=False)
        lower.set_ylabel("Entropy per particle\nat T_c (k_B)", parse_math=False)
        words = style.quantity(str(dataset[axis].attrs["long_name"]), str(dataset[axis].attrs["units"]))
        lower.set_xlabel(words, parse_math=False)
        figure.suptitle(
            style.clean(str(dataset.attrs["title"]), 70), x=0.02, ha="left", size=style.TITLE_SIZE, parse_math=False
        )
        upper.set_title(f"Order of {_WHAT[str(dataset.attrs['order'])]}", loc="left")
        settle(figure)
        return figure


def _pair(panel: Axes, dataset: xr.Dataset, axis: str, best: str, bare: str) -> None:
    x = dataset[axis].values
    exists = dataset["reason"].values == 0
    colour = style.LINE_COLOURS[0]
    for name, look, words in ((best, {"lw": 1.8}, "best estimate"), (bare, {"lw": 1.2, "ls": "--"}, "mean field")):
        y = np.where(exists, dataset[name].values, np.nan)
        panel.plot(x, y, color=colour, **look)
        if exists.any():
            at = int(np.flatnonzero(exists)[-1])
            panel.annotate(words, (x[at], y[at]), (5, 0), textcoords="offset points", color=colour, va="center")
    panel.set_ylim(bottom=0.0)
    panel.margins(y=0.15)
