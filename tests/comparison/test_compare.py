"""The comparison as users meet it: the stored set, entries, mixtures, runs, the command line, the figure."""

import json

import numpy as np
import pytest
import xarray as xr

import gutz
from gutz.cli import main
from gutz.comparison import predictions, references
from gutz.comparison.judge import judge
from gutz.comparison.observables import OBSERVABLES, measured, peaks
from gutz.comparison.references import References
from gutz.comparison.verdicts import Flag, Verdict
from gutz.errors import InputError
from gutz.phases import Phase
from gutz.plots import comparison as figure
from gutz.status import Status


@pytest.fixture(scope="module")
def whole():
    return gutz.compare()


@pytest.fixture(scope="module")
def every():
    return references.load()


def run(capsys, *arguments):
    with pytest.raises(SystemExit) as stop:
        main([str(a) for a in arguments])
    printed = capsys.readouterr()
    return stop.value.code, printed.out, printed.err


# --- the stored set -----------------------------------------------------------------------------------------


def test_kept_predictions_cover_the_stored_set(every):
    for ansatz in ("product", "dressed"):
        held = predictions.stored(predictions.STORED, ansatz)
        for some in every.values():
            assert {dataset.attrs["identity"] for dataset in some.datasets} <= set(held)


def picked(some, names):
    index = [some.names.index(name) for name in names]
    return References(tuple(some.entries[i] for i in index), tuple(some.datasets[i] for i in index), some.places[index])


@pytest.mark.parametrize(
    ("species", "names"),
    [(1, ("one-unit-U-3", "one-unit-U-12", "one-half-U-8"))],
)
def test_kept_predictions_are_those_of_the_solver(every, species, names):
    some = picked(every[species], names)
    kept, fresh = judge(some, "product"), judge(some, "product", kept=None)
    np.testing.assert_allclose(kept.predicted, fresh.predicted, atol=1e-6)
    np.testing.assert_array_equal(kept.flags, fresh.flags)


@pytest.mark.slow
def test_kept_dressed_predictions_are_those_of_the_solver(every):
    some = picked(every[1], ("one-unit-U-3", "one-unit-U-12", "one-half-U-8"))
    kept, fresh = judge(some, "dressed"), judge(some, "dressed", kept=None)
    np.testing.assert_allclose(kept.predicted, fresh.predicted, atol=1e-5)


def at(whole, entry, ansatz, observable, what="error"):
    return whole[what].sel(entry=entry, ansatz=ansatz, observable=observable).item()


def test_product_energy_in_the_insulator_is_zero(whole):
    """Deep in the Mott phase the product state is one atom per site: no hopping energy, E = -4 t^2/U missed, which is
    half of the hopping energy -8 t^2/U (second-order perturbation theory, textbook)."""
    assert at(whole, "one-unit-U-40", "product", "energy", "prediction") == pytest.approx(0.0, abs=1e-9)
    assert at(whole, "one-unit-U-40", "product", "energy") == pytest.approx(0.5, abs=0.01)
    assert at(whole, "one-unit-U-40", "dressed", "energy") < 0.01


def test_mean_field_calls_a_chain_superfluid_far_into_the_insulator(whole):
    """Bare product ansatz: superfluid up to U/t = 11.66; published transition 3.3 (Kühner, White & Monien 2000). The
    flag says so between them."""
    for U in (5, 6, 8):
        assert at(whole, f"one-unit-U-{U}", "product", "phase", "reference") == Phase.MOTT
        bits = whole["flags"].sel(entry=f"one-unit-U-{U}", ansatz="product").item()
        assert bits & Flag.LOCKING_MISSED
    assert not whole["flags"].sel(entry="one-unit-U-12", ansatz="product").item() & Flag.LOCKING_MISSED


def test_product_sees_no_pairs(whole):
    """Second order in the hopping is out of reach of a product state; the dressed one has it, and misses a quarter as
    much of the energy (own run: 13 % against 53 %)."""
    entry = "hardcore-pair-half-U12--8"
    assert whole["overall"].sel(entry=entry, ansatz="product").item() == Verdict.WRONG
    assert at(whole, entry, "dressed", "phase") == 0.0
    assert at(whole, entry, "dressed", "energy") < 0.3 * at(whole, entry, "product", "energy")


def test_particle_hole_duality_carries_over(whole):
    """Hard-core, half filled: pairs at -U12 are anti-pairs at U12 (particle-hole exchange of one species, exact), so
    energies' errors agree. The hopping energies are equal, and so are the references to their own accuracy."""
    for ansatz in ("product", "dressed"):
        pair = at(whole, "hardcore-pair-half-U12--8", ansatz, "energy")
        assert at(whole, "hardcore-counter-half-U12-8", ansatz, "energy") == pytest.approx(pair, abs=1e-3)


def test_numbers_are_explained(whole):
    for name, variable in whole.variables.items():
        if name not in ("entry", "ansatz"):
            assert variable.attrs.get("long_name"), name
            assert "units" in variable.attrs, name
    errors = whole["error"].values
    np.testing.assert_array_equal(whole["verdict"].values == Verdict.NOT_JUDGED, np.isnan(errors))
    assert list(whole["observable"].values) == list(OBSERVABLES)


def test_unsure_references_judge_nothing(every):
    some = picked(every[1], ("one-unit-U-3",))
    vague = some.datasets[0].copy(deep=True)
    vague["energy_error"] = vague["energy_error"] + 1.0
    found = judge(References(some.entries, (vague,), some.places), "product")
    names = list(OBSERVABLES)
    assert np.isnan(found.errors[0, names.index("energy")])
    assert np.isfinite(found.errors[0, names.index("coherence")])


def test_noise_peaks_of_a_pair_state():
    """n^2 [d(k+k') - 1/Ns] between the species and (n^2 + n)[d(k-k') - 1/Ns] - n d(k-k') within one."""
    sites, m2, n = 24, 0.25, 0.5
    k = np.arange(sites)
    partner = (k[:, None] + k[None, :]) % sites == 0
    cross = m2 * (partner - 1 / sites)
    same = (n**2 + n) * (np.eye(sites) - 1 / sites) - n * np.eye(sites)
    found = peaks(np.array([[same, cross], [cross.T, same]]))
    assert found["pair_peak"] == pytest.approx(m2 * (1 - 1 / sites))
    assert found["antipair_peak"] == pytest.approx(-m2 / sites)
    assert found["bunching_peak"] == pytest.approx([n**2 - (n**2 + n) / sites] * 2)


def test_stored_noise_maps_show_the_right_peak(every):
    """Pairs along k' = -k, anti-pairs along k' = k; algebraic decay leaves a fraction of mean field's 1/4."""
    for name, strong, weak in (
        ("hardcore-pair-half-U12--8", "pair_peak", "antipair_peak"),
        ("hardcore-counter-half-U12-8", "antipair_peak", "pair_peak"),
    ):
        some = picked(every[2], (name,))
        values = measured(some.entries[0], some.datasets[0]).values
        assert 0.25 > values[strong][0] > 0.04
        assert abs(values[weak][0]) < 0.3 * values[strong][0]


# --- mixtures and runs --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def points():
    mixture = gutz.Mixture(
        t=1.0, U=np.array([8.0, 7.0, 0.3]), filling=np.array([1.0, 1.0, 0.1]), dim=1, species=1, n_max=12
    )
    return gutz.compare(mixture, ansatz="product")


def test_a_mixture_at_a_reference_gets_its_errors(whole, points):
    own = whole["error"].sel(entry="one-unit-U-8", ansatz="product")
    found = points["error"].isel(point=0).sel(ansatz="product")
    np.testing.assert_allclose(found.values, np.minimum(own.values, 1.0), atol=1e-9)
    assert points["nearest"].isel(point=0).item() == "one-unit-U-8"


def test_between_references_the_estimate_has_a_spread(points):
    one = points.isel(point=1).sel(ansatz="product", observable="energy")
    assert 0 < one["distance"].item() < 1
    assert one["error_lowest"].item() <= one["error"].item() <= one["error_highest"].item()


def test_far_from_references_nothing_is_claimed(points):
    one = points.isel(point=2).sel(ansatz="product")
    assert one["distance"].item() > 1
    assert one["overall"].item() == Verdict.NOT_JUDGED
    assert np.isnan(one["error"].values).all()
    assert one["flags"].item() & Flag.DEPLETION_DIVERGES
    assert 1 < one["coherent_sites"].item()


def test_a_run_is_compared_point_by_point(points):
    mixture = gutz.Mixture(
        t=1.0, U=np.array([8.0, 7.0, 0.3]), filling=np.array([1.0, 1.0, 0.1]), dim=1, species=1, n_max=12
    )
    solution = gutz.solve(mixture)
    run = solution.to_dataset(["U"], {"U": [8.0, 7.0, 0.3]}).assign_attrs(axes=["U"])
    run["t"] = (("U", "species", "direction"), np.ones((3, 1, 1)))
    found = gutz.compare(run)
    np.testing.assert_allclose(found["error"].values, points["error"].values, atol=1e-9)
    np.testing.assert_array_equal(found["flags"].values, points["flags"].values)
    assert found["U"].values.tolist() == [8.0, 7.0, 0.3]


@pytest.mark.parametrize(
    ("what", "words"),
    [
        (lambda: gutz.Mixture(t=0.1, U=1.0, mu=0.4, dim=3, species=1), "dim = 3"),
        (lambda: gutz.Mixture(t=0.1, U=1.0, mu=0.4, dim=1, species=1, offset=0.2), "offset"),
        (lambda: "one-unit-U-300", "did you mean"),
        (lambda: xr.Dataset(attrs={"axes": []}), "dim = 0"),
        (lambda: 5, "must be a mixture"),
    ],
)
def test_what_cannot_be_compared(what, words):
    with pytest.raises(InputError, match=words):
        gutz.compare(what())


def test_unknown_ansatz():
    with pytest.raises(InputError, match="must be one of"):
        gutz.compare(ansatz="exact")


def test_places_that_miss_their_filling_are_flagged(every):
    found = predictions.solve_places(every[1].places[:1], "product", np.array([0]))
    assert found["filling"][0, 0] == pytest.approx(1.0, abs=1e-3)
    assert int(found["status"][0]) & ~int(Status.PLATEAU) == 0


# --- command line and figure --------------------------------------------------------------------------------


def test_overview_on_the_command_line(capsys, tmp_path):
    code, out, err = run(capsys, "compare", "--out", tmp_path / "made")
    assert code == 0
    assert "one-unit-U-3" in out and "quantitative" in out
    assert {path.name for path in (tmp_path / "made").iterdir()} == {"compare.nc", "compare.png", "compare.pdf"}
    again, _, words = run(capsys, "compare", "--out", tmp_path / "made")
    assert again == 4 and "--force" in words


def test_one_entry_as_json(capsys):
    code, out, _ = run(capsys, "compare", "--entry", "one-unit-U-40", "--json")
    found = json.loads(out)
    assert code == 0
    assert found["coordinates"]["entry"]["values"] == ["one-unit-U-40"]
    assert found["variables"]["error"]["dims"] == ["entry", "ansatz", "observable"]


def test_exit_codes_and_words(capsys, tmp_path):
    cases = [
        (("compare", "--entry", "nothing"), 2, "not a stored entry"),
        (("compare", "--references", tmp_path / "none.nc"), 3, "does not exist"),
        (("compare", "--at", "U=3"), 2, "need a scan file"),
        (("reference", "list", "--file", tmp_path / "none.nc"), 3, "does not exist"),
        (("reference", "verify", "nothing"), 2, "not an entry"),
        (("reference", "make", tmp_path / "none.toml"), 2, "cannot be read"),
    ]
    scan = tmp_path / "scan.toml"
    scan.write_text("[mixture]\nt = 1.0\nU = 5.0\nfilling = 1.0\nspecies = 1\ndim = 3\n")
    cases.append((("compare", scan), 2, "dim = 3"))
    for arguments, code, words in cases:
        found, out, err = run(capsys, *arguments)
        assert (found, out) == (code, ""), arguments
        assert words in err and "Traceback" not in err


def test_list_on_the_command_line(capsys):
    code, out, _ = run(capsys, "reference", "list", "--json")
    records = json.loads(out)
    assert code == 0
    assert {"name", "phase", "lengths", "n_max", "bond", "discarded", "energy_error"} <= set(records[0])


def test_the_figure_shows_every_reference_in_its_plane(whole):
    drawn = figure.draw(whole)
    panels = [axes for axes in drawn.axes if axes.get_title(loc="left")]
    assert len(panels) == 4
    soft = np.isfinite(whole["U_over_t"]) & (whole["T_over_t"] == 0)
    one = soft & (whole["species_count"] == 1) & np.isfinite(whole["mu"])
    shown = sum(
        len(c.get_offsets()) for c in panels[0].collections if hasattr(c, "get_offsets") and c.get_zorder() == 5
    )
    assert shown == int(one.sum())
