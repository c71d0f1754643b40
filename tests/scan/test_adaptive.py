"""Refinement: labels as on the dense grid for a fraction of the solves; fills; resume; refusals."""

import contextlib
from types import SimpleNamespace

import numpy as np
import pytest
import standin
from conftest import MIXTURE

from gutz.errors import InputError, OutputError
from gutz.phases import Phase
from gutz.scan import adaptive, chunk, document, export, guard, open_run, plan, schema, spec
from gutz.scan.quadtree import Cell, Tree
from gutz.status import Status


def labelled(mixture, ansatz="product"):
    """The stand-in with labels that are regions: half a plane, a disc, and a wedge that is thin at one end."""
    found = vars(standin.solve(mixture, ansatz))
    x, y = 20 * np.asarray(mixture.t)[..., 0, 0], (np.asarray(mixture.mu)[..., 0] - 0.1) / 1.2
    phase = np.where(y > 0.55 + 0.2 * np.sin(5 * x), Phase.SUPERFLUID, Phase.MOTT)
    phase = np.where((x - 0.7) ** 2 + (y - 0.25) ** 2 < 0.02, Phase.NORMAL, phase)
    phase = np.where((np.abs(y - 0.5) < 0.2 * (0.5 - x)), Phase.PAIRED, phase)
    for name, values in found.items():
        if values.dtype == float:
            trailing = (None,) * (values.ndim - x.ndim)
            found[name] = (3 * x - 2 * y)[(..., *trailing)] + np.zeros_like(values)
    found["T"] = np.broadcast_to(mixture.T, x.shape)
    found["coherence_length"] = np.full_like(found["coherence_length"], np.inf)
    found |= {"phase": phase.astype(np.int8), "status": np.where(phase == Phase.MOTT, Status.DEMIXING, 0)}
    found["order_range"] = np.zeros_like(found["phase"])
    return SimpleNamespace(**{name: np.asarray(v).astype(standin.VARIABLES[name].dtype) for name, v in found.items()})


@pytest.fixture
def regions(quick, monkeypatch):
    monkeypatch.setattr(chunk, "solve", labelled)
    return quick


FINE = ["axes.mu.points=129", "axes.hop.points=161"]


@pytest.fixture(scope="module")
def both(tmp_path_factory):
    """The same file, every point solved (in one call, without a store) and refined."""
    folder = tmp_path_factory.mktemp("both")
    (folder / "mixture.toml").write_text(MIXTURE)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(chunk, "solve", labelled)
        outcome, _ = adaptive.run(folder / "mixture.toml", folder / "out", overrides=FINE)
    full = plan.plan(spec.check(document.read(folder / "mixture.toml", FINE)))
    mixture = chunk.mixture_of(full.settings([axis.values for axis in full.axes], None))
    dense = {name: getattr(mixture, name) for name in ("t", "U", "U12")} | vars(labelled(mixture))
    return outcome, dense, export.read_netcdf(folder / "out" / "adaptive.nc"), folder / "out"


def test_labels_are_those_of_the_dense_grid_for_a_fraction_of_the_solves(both):
    outcome, dense, found, _ = both
    assert len(np.unique(dense["phase"])) == 4
    assert np.array_equal(dense["phase"], found.phase)
    assert np.array_equal(dense["status"], found.status)
    assert outcome.solves == int(found.solved.sum()) == found.attrs["solves"] < found.phase.size / 8
    assert outcome.points == found.phase.size and outcome.computed == outcome.solves


def test_numbers_are_exact_where_solved_and_linear_between(both):
    """The stand-in's numbers are linear in both axes, so interpolation must reproduce them."""
    _, dense, found, _ = both
    assert found.solved.dtype == bool
    for name in schema.VARIABLES.keys() & found.data_vars:
        assert found[name].dtype == dense[name].dtype
        tolerance = np.where(found.solved, 0, 1e-14)[(..., *(None,) * (dense[name].ndim - 2))]
        with np.errstate(invalid="ignore"):
            close = np.abs(dense[name] - found[name].values) <= tolerance * 5.0
        assert (close | (dense[name] == found[name].values)).all(), name
    assert np.isinf(found.coherence_length).all()
    for name in ("t", "U", "U12", "T"):
        assert np.array_equal(found[name], dense[name])


def test_the_list_of_points_is_the_mask(both):
    found = both[2]
    assert np.array_equal(np.sort(found.point_index), np.flatnonzero(found.solved))
    assert (np.diff(found.point_level) >= 0).all()
    assert (found.point_level == 0).sum() == adaptive.NODES**2


@pytest.mark.parametrize("after", [1, pytest.param(4, marks=pytest.mark.slow)])
def test_stopped_and_continued_equals_undisturbed(both, regions, mixture_file, tmp_path, monkeypatch, after):
    """Stopped after some pieces: only what was solved is there; continued: nothing is solved twice."""
    outcome, _, whole, _ = both
    count, received = [], []

    def stop(done, total):
        count.append(done)
        if len(count) == after:
            received.append(15)

    with monkeypatch.context() as patch:
        patch.setattr(guard, "stoppable", contextlib.contextmanager(lambda notice: iter([received])))
        first, _ = adaptive.run(mixture_file, tmp_path / "cut", overrides=FINE, progress=stop)
    assert first.exit_code == 128 + 15
    half = export.read_netcdf(tmp_path / "cut" / "adaptive.nc")
    assert half.attrs["complete"] == 0
    assert np.array_equal(half.status != schema.NOT_COMPUTED, half.solved)
    second, _ = adaptive.run(mixture_file, tmp_path / "cut", overrides=FINE, resume=True)
    assert first.computed + second.computed == outcome.solves
    again = export.read_netcdf(tmp_path / "cut" / "adaptive.nc")
    assert again.drop_attrs().identical(whole.drop_attrs())


def test_more_axes_are_run_through(regions, mixture_file, tmp_path):
    text = mixture_file.read_text() + '\n[axes.T]\nparameter = "mixture.T"\nvalues = [0.1, 0.2]\n'
    mixture_file.write_text(text.replace("T = 0.1\n", ""))
    regions.run(mixture_file, tmp_path / "dense")
    adaptive.run(mixture_file, tmp_path / "out", nodes=9)
    found = export.read_netcdf(tmp_path / "out" / "adaptive.nc")
    assert np.array_equal(open_run(tmp_path / "dense").phase, found.phase)
    assert found.phase.dims == ("mu", "hop", "T") and not found.solved.all()


@pytest.mark.parametrize(
    "overrides, given, error, words",
    [
        ([], {"nodes": 1}, InputError, "nodes is 1; it must be at least 2"),
        (["axes.mu.points=3000", "axes.hop.points=3000"], {}, InputError, "at most 4,000,000"),
    ],
)
def test_mistakes_are_one_sentence(regions, mixture_file, tmp_path, overrides, given, error, words):
    with pytest.raises(error, match=words):
        adaptive.run(mixture_file, tmp_path / "out", overrides=overrides, **given)


def test_other_settings_and_existing_files_are_refused(both, mixture_file):
    with pytest.raises(OutputError, match=r"holds adaptive.nc already; continue it with --resume"):
        adaptive.run(mixture_file, both[3], overrides=FINE)
    with pytest.raises(OutputError, match=r"other settings \(axes.hop.points: 161 -> 30"):
        adaptive.run(mixture_file, both[3], resume=True)
    with pytest.raises(OutputError, match=r"other settings \(--nodes: 17 -> 9\)"):
        adaptive.run(mixture_file, both[3], overrides=FINE, nodes=9, resume=True)


def test_cells_halve_down_to_the_grid():
    """Common practice, no source: halving covers the cell, and ends."""
    assert Cell(0, 1, 4, 5).parts() == []
    assert Cell(0, 3, 4, 5).parts() == [Cell(0, 1, 4, 5), Cell(1, 3, 4, 5)]
    tree = Tree((12, 7), 3)
    labels, known = np.arange(84).reshape(12, 7), np.ones((12, 7), bool)
    while tree.divide(labels, known):
        pass
    assert len(tree.leaves) == 11 * 6
    assert tree.corners() == [*np.ndindex(12, 7)]
