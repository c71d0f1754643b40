"""Figures: names inside their regions and never overlapping, hatching, colours, hostile text, no global state."""

import itertools
import subprocess
import sys

import matplotlib
import numpy as np
import pytest
import xarray as xr
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import QuadMesh

from gutz import labels, plots, style
from gutz.errors import InputError
from gutz.phases import WORDS, Phase
from gutz.plots import diagram
from gutz.status import Status


def dataset(shape=(40, 30), title="A title", bad=False, names=("depth", "T", "a12", "mu", "t"), scale="linear"):
    """A dataset with a superfluid, an insulator and a normal corner; not physics."""
    axes = names[: len(shape)]
    spaced = np.geomspace if scale == "log" else np.linspace
    coords = {
        axis: (axis, spaced(1.0, 20.0, n), {"units": "nK" if axis == "T" else "1", "long_name": f"Axis {axis}"})
        for axis, n in zip(axes, shape, strict=True)
    }
    grids = np.meshgrid(*(np.linspace(0, 1, n) for n in shape), indexing="ij")
    x, y = grids[0], grids[1] if len(grids) > 1 else 0 * grids[0]
    phase = np.where(x + y < 0.8, Phase.SUPERFLUID, np.where(y > 0.5, Phase.NORMAL, Phase.MOTT)).astype(np.int8)
    status = np.zeros(shape, np.int32)
    if bad:
        status[: shape[0] // 4] = int(Status.CUTOFF)
    filling = np.stack([x + 0.1, y + 0.2], axis=-1)
    variables = {
        "phase": (axes, phase, {"units": "1", "long_name": "Phase"}),
        "status": (axes, status, {"units": "1", "long_name": "Status"}),
        "filling": ((*axes, "species"), filling, {"units": "1", "long_name": "Filling"}),
        "condensate": (
            (*axes, "species"),
            filling * 0 + x[..., None],
            {"units": "1", "long_name": "Condensate density"},
        ),
        "energy": (axes, x - 0.5, {"units": "E_R", "long_name": "Energy per site"}),
        "stiffness": (
            (*axes, "species", "species_", "direction"),
            np.ones((*shape, 2, 2, 3)),
            {"units": "E_R", "long_name": "Stiffness"},
        ),
        "heat_capacity": (axes, np.full(shape, np.nan), {"units": "k_B", "long_name": "Heat capacity"}),
    }
    attributes = {"axes": list(axes), "title": title, "ansatz": "product", "dim": 3}
    return xr.Dataset(variables, coords=coords, attrs=attributes)


def words(figure):
    return [text.get_text() for panel in figure.axes for text in panel.texts]


def test_phases_are_named_inside_their_regions():
    data = dataset()
    figure = plots.draw(data, "phase")
    panel = figure.axes[0]
    renderer = FigureCanvasAgg(figure).get_renderer()
    assert sorted(words(figure)) == ["Mott insulator", "normal", "superfluid"]
    across, up = labels.pixel_grid(panel)
    box = panel.get_window_extent()
    codes = data.phase.transpose("T", "depth").values
    pixels = codes[np.ix_(diagram._cells(data["T"].values, up), diagram._cells(data["depth"].values, across))]
    for text in panel.texts:
        extent = text.get_window_extent(renderer)
        inside = pixels[
            int(extent.y0 - box.y0) : int(extent.y1 - box.y0) + 1, int(extent.x0 - box.x0) : int(extent.x1 - box.x0) + 1
        ]
        assert {WORDS[Phase(code)] for code in np.unique(inside)} == {text.get_text().replace("\n", " ")}


@pytest.mark.parametrize("seed", range(6))
def test_names_never_overlap_and_never_leave_their_region(seed):
    """Random maps of stripes and blobs: whatever is written lies wholly in its region; the rest is reported."""
    rng = np.random.default_rng(seed)
    figure = matplotlib.figure.Figure(figsize=(5, 4), dpi=100)
    FigureCanvasAgg(figure)
    panel = figure.subplots()
    figure.draw_without_rendering()
    box = panel.get_window_extent()
    shape = (int(box.height), int(box.width))
    centres = rng.random((7, 2)) * shape
    rows, columns = np.indices(shape)
    distance = (rows[..., None] - centres[:, 0]) ** 2 + (columns[..., None] - centres[:, 1]) ** 2
    pixels = distance.argmin(-1)
    known = {int(p): WORDS[p] for p in [*Phase][1:8]}
    failed = labels.place(panel, pixels, known, {int(p): style.PHASE_COLOURS[p] for p in Phase})
    renderer = FigureCanvasAgg(figure).get_renderer()
    extents = [text.get_window_extent(renderer) for text in panel.texts]
    for text, extent in zip(panel.texts, extents, strict=True):
        code = next(c for c, w in known.items() if w == text.get_text().replace("\n", " "))
        inside = pixels[
            int(extent.y0 - box.y0) : int(extent.y1 - box.y0) + 1, int(extent.x0 - box.x0) : int(extent.x1 - box.x0) + 1
        ]
        assert np.all(inside == code)
    assert not any(a.overlaps(b) for a, b in itertools.combinations(extents, 2))
    assert len(panel.texts) + len(failed) == len(set(np.unique(pixels)) & set(known))


def test_regions_too_small_for_words_get_a_legend_that_covers_nothing():
    data = dataset()
    data.phase[20, 15] = int(Phase.PAIRED)
    figure = plots.draw(data, "phase")
    legend = figure.legends[0]
    assert [text.get_text() for text in legend.get_texts()] == ["paired superfluid"]
    figure.draw_without_rendering()
    extent = legend.get_window_extent()
    tight = figure.axes[0].get_tightbbox()
    caption = next(t for t in figure.texts if "ansatz" in t.get_text())
    last = caption.get_window_extent()
    assert not extent.overlaps(tight)
    # The caption's text box starts with empty lines that hold the legend; its last line must stay clear.
    assert extent.y0 > last.y0 + caption.get_fontsize() / 72 * figure.dpi


def test_untrusted_points_are_hatched_and_said():
    clean, marked = plots.draw(dataset(), "phase"), plots.draw(dataset(bad=True), "phase")
    caption = [t.get_text() for t in marked.texts]
    assert any("not to be trusted" in text for text in caption)
    assert not any("not to be trusted" in t.get_text() for t in clean.texts)
    assert len(marked.axes[0].collections) == len(clean.axes[0].collections) + 1
    with_numbers = plots.draw(dataset(bad=True), "energy")
    assert len(with_numbers.axes[0].collections) == 2


def test_points_not_computed_are_counted():
    data = dataset()
    data.status[:3] = -1
    figure = plots.draw(data, "energy")
    assert any("90 points not computed yet" in t.get_text() for t in figure.texts)


def test_maps_hold_the_numbers():
    """R6: the drawn colours' values are the dataset's values, cell by cell."""
    data = dataset()
    figure = plots.draw(data, "filling")
    for panel, species in zip(figure.axes[:2], (0, 1), strict=True):
        mesh = next(c for c in panel.collections if isinstance(c, QuadMesh))
        assert np.array_equal(mesh.get_array(), data.filling.isel(species=species).transpose("T", "depth"))
    assert [panel.get_title(loc="left") for panel in figure.axes[:2]] == ["species 1", "species 2"]
    assert figure.axes[1].get_xlabel() == "Axis depth"
    assert figure.axes[0].get_ylabel() == "Axis T (nK)"


def test_equal_species_share_a_panel():
    figure = plots.draw(dataset(), "condensate")
    assert [panel.get_title(loc="left") for panel in figure.axes[:-1]] == ["each species"]


def test_signed_numbers_are_balanced_around_zero():
    figure = plots.draw(dataset(), "energy")
    low, high = figure.axes[0].collections[0].get_clim()
    assert low == -high


def test_all_undefined_is_drawn_without_a_warning():
    assert plots.draw(dataset(), "heat_capacity").axes


def test_third_axis_makes_panels_and_further_axes_are_held():
    figure = plots.draw(dataset(shape=(6, 5, 9, 4, 3)), "phase")
    titles = [panel.get_title(loc="left") for panel in figure.axes]
    assert titles == ["a12 = 1", "a12 = 8.125", "a12 = 12.88", "a12 = 20"]
    assert any("mu = 13.67, t = 10.5" in t.get_text() for t in figure.texts)


def test_logarithmic_axes_are_recognised():
    figure = plots.draw(dataset(scale="log"), "phase")
    assert figure.axes[0].get_xscale() == figure.axes[0].get_yscale() == "log"


def test_falling_axes_are_drawn_right():
    data = dataset().isel(depth=slice(None, None, -1))
    figure = plots.draw(data, "phase")
    assert sorted(words(figure)) == ["Mott insulator", "normal", "superfluid"]
    assert figure.axes[0].get_xlim()[0] < figure.axes[0].get_xlim()[1]


def test_one_axis_gives_lines_under_a_strip_of_phases():
    data = dataset(shape=(50,), bad=True)
    figure = plots.draw(data, "filling")
    strip, panel = figure.axes
    assert {text.get_text() for text in strip.texts} == {"superfluid", "Mott insulator"}
    lines = panel.get_lines()
    assert np.array_equal(lines[0].get_ydata(), data.filling.isel(species=0))
    assert np.array_equal(lines[2].get_ydata(), data.filling.isel(species=1))
    assert len(lines[1].get_xdata()) == 50 // 4  # crosses on points not to be trusted
    assert plots.draw(data, "phase").axes[1].get_ylabel() == "Condensate density"


@pytest.mark.parametrize(
    "title", [r"$\frac{$", "x" * 100_000, "a\x00\x1b[31mb", "\u202eabc", "שלום", "日本", "<b>&amp;"]
)
def test_hostile_words_are_drawn_as_text(tmp_path, title):
    """X6: user text is never read as mathematics, and never an exception."""
    data = dataset(title=title, shape=(4, 3))
    data.depth.attrs["long_name"] = title
    paths = plots.save(plots.draw(data, "phase"), tmp_path / "phase")
    assert [p.stat().st_size > 1000 for p in paths] == [True, True]


def test_unknown_variables_are_refused():
    with pytest.raises(InputError, match='"nothing" is not in this run; it has phase'):
        plots.draw(dataset(), "nothing")


def test_the_same_run_gives_the_same_pictures(tmp_path):
    for name in ("a", "b"):
        plots.save(plots.draw(dataset(), "phase"), tmp_path / name)
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()
    assert (tmp_path / "a.pdf").read_bytes() == (tmp_path / "b.pdf").read_bytes()


def test_no_global_state(tmp_path):
    before = dict(matplotlib.rcParams)
    plots.save(plots.draw(dataset(), "filling"), tmp_path / "x")
    assert dict(matplotlib.rcParams) == before


def test_pyplot_is_never_loaded():
    code = "import sys, gutz.plots; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], timeout=60).returncode == 0


def test_parameters_are_named_at_their_lines():
    x = np.linspace(5, 20, 30)
    columns = {"t1": np.exp(-x), "t2": np.exp(-x), "U1": x, "U2": x * 1.001, "U12": -x * 0.999, "gap": x * 20}
    figure = plots.parameters(x, ("Lattice depth", "E_R"), columns, "Hz", "title")
    names = [text.get_text() for text in figure.axes[0].texts]
    assert names == ["t1, t2", "|U12|", "U1", "U2", "gap"]
    places = [text.get_position()[1] for text in figure.axes[0].texts]
    height = figure.axes[0].get_window_extent().height / figure.dpi * 72
    assert min(np.diff(places)) * height >= style.TEXT_SIZE


# Colour-blind safety. Simulated with the matrices for complete dichromacy of Machado, Oliveira, Fernandes, IEEE Trans.
# Vis. Comput. Graph. 15, 1291 (2009) (from memory); distances in CIELAB; the limit of 8 is common practice, no source.
DICHROMACY = {
    "none": np.eye(3),
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


def linear(colour):
    c = np.array([int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)])
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def lab(rgb):
    xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]) @ np.clip(rgb, 0, 1)
    f = np.cbrt(xyz / np.array([0.9505, 1.0, 1.089]))
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("sight", DICHROMACY)
def test_phase_colours_stay_apart(sight):
    seen = {phase: lab(np.asarray(DICHROMACY[sight]) @ linear(c)) for phase, c in style.PHASE_COLOURS.items()}
    close = [
        (a.name, b.name)
        for a, b in itertools.combinations(seen, 2)
        if np.linalg.norm(seen[a] - seen[b]) < 8
        and {a, b} != {Phase.UNDECIDED, Phase.VACUUM}  # white and nearly white: both mean "nothing there"
    ]
    assert close == []


def test_ramp_runs_evenly_from_light_to_dark():
    lightness = [
        lab(np.where((c := np.array(style.RAMP(v)[:3])) <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4))[0]
        for v in np.linspace(0, 1, 50)
    ]
    steps = np.diff(lightness)
    assert np.all(steps < 0)
    assert steps.min() > 3 * steps.mean()


def test_names_can_be_read_on_their_colour():
    """WCAG 2 contrast of at least 3 : 1 for large text."""
    for colour in style.PHASE_COLOURS.values():
        a, b = (linear(c) @ [0.2126, 0.7152, 0.0722] + 0.05 for c in (colour, style.ink_on(colour)))
        assert max(a, b) / min(a, b) >= 3
