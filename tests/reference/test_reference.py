"""Reference entries: right against exact chains and published numbers, whole on disk, found out when changed."""

import json
from dataclasses import replace

import numpy as np
import pytest
import xarray as xr

from gutz.errors import DataError, InputError
from gutz.exact import LatticeModel, chain, chains, ed
from gutz.phases import Phase
from gutz.reference import decay, make, measure, plan, store, verify
from gutz.scan import document

PLAN = """
[defaults]
t = 1.0
lengths = [4, 6, 8]
noise_length = 4
bond = 40
[[entry]]
name = "hard"
species = 1
filling = 0.5
gaps = true
[[entry]]
name = "two"
species = 2
U = 6.0
U12 = 3.0
filling = 0.5
n_max = 2
lengths = [4, 6]
bond = 300
[[entry]]
name = "exact"
species = 2
U12 = 4.0
filling = 0.5
method = "Bethe ansatz"
lengths = []
noise_length = 0
"""


@pytest.fixture(scope="module")
def entries():
    return plan.entries(document.parse(PLAN, "plan.toml"))


@pytest.fixture(scope="module")
def made(entries, tmp_path_factory):
    path = tmp_path_factory.mktemp("references") / "references.nc"
    assert make.make(entries, path) == (3, 0)
    return path


@pytest.fixture(scope="module")
def stored():
    return store.read_all(store.STORED)


# --- making -------------------------------------------------------------------------------------------------


def test_measurements_are_those_of_exact_diagonalisation(entries, made):
    two = store.read(made, "two")
    exact = ed.ground_state(LatticeModel(chain(6), t=(1.0, 1.0), U=(6.0, 6.0), U12=3.0, n_max=2), (3, 3))
    last = two.isel(run=-1)
    assert last["total_energy"].item() == pytest.approx(exact.energy, abs=1e-8)
    pair, antipair = ed.pair(exact), ed.antipair(exact)
    assert last["sum_pair"].values[:2] == pytest.approx([np.trace(pair), np.trace(pair, 1)], abs=1e-6)
    assert last["sum_antipair"].values[1] == pytest.approx(np.trace(antipair, 1), abs=1e-6)
    n1, n2 = exact.filling
    shared = ed.density_density(exact, 0, 1) - np.outer(n1, n2)
    assert last["sum_covariance"].values[0, 1] == pytest.approx(np.trace(shared), abs=1e-6)
    left = shared[:2, :2].sum()
    assert two["fluctuation"].values[0, 1, 1] == pytest.approx(left, abs=1e-6)
    short = ed.ground_state(LatticeModel(chain(4), t=(1.0, 1.0), U=(6.0, 6.0), U12=3.0, n_max=2), (2, 2))
    assert two["noise"].values[0, 1] == pytest.approx(ed.noise_map(short, 0, 1), abs=1e-6)


def test_free_fermions_and_sweeps_agree(entries):
    hard = entries[0]
    swept = measure.measure(hard)
    free = measure.measure(replace(hard, method="free fermions", noise_length=0, gaps=False))
    for name in ("total_energy", "sum_one_body", "sum_density"):
        assert swept[name].values[1:] == pytest.approx(free[name].values, abs=1e-6)
    up, down = swept["changed_energy"].values
    levels = -2 * np.cos(np.pi * np.arange(1, 5) / 5)
    assert (up, down) == pytest.approx((levels[:3].sum(), levels[:1].sum()), abs=1e-8)


def test_making_again_continues(entries, made):
    before = made.read_bytes()
    assert make.make(entries, made) == (0, 3)
    assert made.read_bytes() == before


def test_changed_settings_are_made_anew(entries, tmp_path):
    path = tmp_path / "references.nc"
    make.make(entries[2:], path)
    assert make.make([replace(entries[2], U12=2.0)], path) == (1, 0)
    assert list(store.read_all(path)) == ["exact"]
    assert plan.restore(store.read(path, "exact").attrs["entry"]).U12 == 2.0


def test_stopping_keeps_what_is_done(entries, tmp_path):
    path = tmp_path / "references.nc"

    def stop(words):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        make.make([entries[2], entries[0]], path, notice=stop)
    assert list(store.read_all(path)) == ["exact"]
    assert make.make([entries[2], entries[0]], path) == (1, 1)


def test_provenance_names_no_machine(made):
    hard = store.read(made, "hard")
    assert set(hard.attrs) == {"entry", "identity", "gutz_version", "cpu_seconds"}
    assert json.loads(hard.attrs["entry"])["bond"] == 40


# --- damage -------------------------------------------------------------------------------------------------


def test_a_changed_number_is_found(made, tmp_path):
    """Written again by another program, which knows nothing of the seal."""
    path = tmp_path / "changed.nc"
    with xr.open_dataset(made, engine=store.ENGINE) as opened:
        whole = opened.load()
    whole["energy"].values[0] += 1e-12
    whole.to_netcdf(path, engine=store.ENGINE)
    with pytest.raises(DataError, match="checksum is missing"):
        store.read(path, "hard")


def test_damage_on_the_disk_is_found(made, tmp_path):
    """One byte turned over, anywhere: never read."""
    path = tmp_path / "bytes.nc"
    for at in range(0, made.stat().st_size, made.stat().st_size // 50):
        whole = bytearray(made.read_bytes())
        whole[at] ^= 0xFF
        path.write_bytes(whole)
        with pytest.raises(DataError, match="checksum"):
            store.read_all(path)


@pytest.mark.parametrize("content", [b"", b"something else", None])
def test_files_that_are_not_ours(made, tmp_path, content):
    path = tmp_path / "other.nc"
    path.write_bytes(made.read_bytes()[:20_000] if content is None else content)
    with pytest.raises(DataError, match="other.nc") as caught:
        store.read_all(path)
    assert len(str(caught.value).splitlines()) == 1


def test_unknown_and_missing(made, tmp_path):
    with pytest.raises(InputError, match='did you mean "hard"'):
        store.read(made, "hart")
    with pytest.raises(DataError, match="does not exist"):
        store.read_all(tmp_path / "none.nc")


def test_verify_passes_and_finds_a_wrong_entry(made, tmp_path):
    for name in ("hard", "exact"):
        checks = verify.verify(store.read(made, name))
        assert checks and all(check.passed for check in checks)
    wrong = store.read(made, "hard")
    wrong["total_energy"].values[1] += 1e-3
    path = tmp_path / "wrong.nc"
    store.write(path, "hard", wrong)  # sealed anew: only recomputing can tell
    failed = [check.name for check in verify.verify(store.read(path, "hard")) if not check.passed]
    assert failed == ["total_energy"]


# --- laws of decay, against free fermions -------------------------------------------------------------------


@pytest.mark.parametrize(
    ("sites", "atoms", "accuracy"), [(48, 24, 0.02), (48, 12, 0.02), (48, 36, 0.02), (96, 48, 0.01)]
)
def test_hard_core_bosons_have_exponent_one_half(sites, atoms, accuracy):
    """<b+(r) b> ~ r^-1/2 and K = 1 at every filling (Lenard 1964; Vaidya & Tracy 1979, from memory)."""
    state = chains.hard_core_chain(LatticeModel(chain(sites), t=(1.0,), U=(0.0,), n_max=1), 0.0, atoms)
    G = chains.hard_core_one_body(state.correlation)
    span = np.arange(1, sites)
    left = (sites - 1 - span) // 2
    law = decay.law((G[left, left + span] + G[sites - 1 - span - left, sites - 1 - left]) / 2, sites)
    assert law.algebraic == 1.0
    assert law.exponent == pytest.approx(0.5, abs=accuracy)
    filling = np.diag(state.correlation)
    density = chains.hard_core_density_density(state.correlation) - np.outer(filling, filling)
    left_of_cut = np.diag(density.cumsum(0).cumsum(1))[:-1]
    assert decay.luttinger(left_of_cut, sites, atoms / sites) == pytest.approx(1.0, abs=0.02)


def test_exponential_decay_is_recognised():
    span = np.arange(1, 48)
    law = decay.law(np.exp(-span / 3.0) / np.sqrt(span), 48)
    assert law.algebraic == 0.0
    assert law.decay_length == pytest.approx(3.0, rel=1e-9)
    assert decay.law(np.exp(-span / 0.5), 48).algebraic == 0.0


# --- the stored set, against outside sources ----------------------------------------------------------------


def test_the_stored_set_is_whole_and_wide(stored):
    entries = [plan.restore(dataset.attrs["entry"]) for dataset in stored.values()]
    phases = {int(dataset["phase"]) for dataset in stored.values()}
    assert {Phase.MOTT, Phase.SUPERFLUID, Phase.PAIRED, Phase.COUNTERFLOW} <= phases
    assert max(max(e.lengths, default=0) for e in entries if e.species == 2) >= 48
    assert max(e.noise_length for e in entries) >= 24
    for name, dataset in stored.items():
        assert np.isfinite(dataset["energy"].item()), name
        assert dataset["energy_error"].item() < 0.01, name
    assert store.STORED.stat().st_size < 6e6


def test_mott_energy_and_gap_series(stored):
    """E/(LU) = -4x^2 + 4x^4 + (272/9)x^6 (Damski & Zakrzewski, PRA 74, 043609 (2006), from memory) and gap/U = 1 -
    6x + 5x^2 + 6x^3 + (287/20)x^4 (Ejima et al., PRA 85, 053644 (2012), from memory), at x = t/U = 1/20 and 1/40.
    The next energy term is -63 x^8; the gap of 24 sites lies higher by the zero-point motion of a particle and a hole,
    3 t (pi/25)^2, to leading order: half of that is left to its corrections (own runs: a third)."""
    for U in (20.0, 40.0):
        dataset, x = stored[f"one-unit-U-{U:g}"], 1 / U
        series = -4 * x**2 + 4 * x**4 + 272 / 9 * x**6
        assert dataset["energy"].item() / U == pytest.approx(series, abs=2 * 63 * x**8 + 1e-9)
        full = (dataset["length"] == 24) & (dataset["bond"] == 80)
        gap = dataset["changed_energy"].values.sum() - 2 * dataset["total_energy"].values[full].item()
        motion = 3 * (np.pi / 25) ** 2
        expected = U * (1 - 6 * x + 5 * x**2 + 6 * x**3 + 287 / 20 * x**4)
        assert gap - motion == pytest.approx(expected, abs=0.5 * motion)


def test_superfluid_gives_way_to_the_insulator_where_published(stored):
    """K = 2 at the transition, published t/U = 0.297 to 0.305 (Kühner, White & Monien 2000; Ejima, Fehske & Gebhard
    2011, both from memory). K of 48 sites, interpolated in t/U; its logarithmic corrections leave some per cent, 0.01
    allowed (own run: 0.296)."""
    x = np.array([1 / U for U in (4.0, 3.3, 3.0)])
    K = np.array([stored[f"one-unit-U-{U:g}"]["luttinger"].values[0, 0] for U in (4.0, 3.3, 3.0)])
    assert np.interp(2.0, K, x) == pytest.approx(0.301, abs=0.01)


def test_errors_cover_the_exact_hard_core_numbers(stored):
    """Free fermions: E = -(2t/pi) sin(pi n) per site, coherence half of it, K = 1 (Jordan & Wigner)."""
    for filling in (0.25, 0.5, 0.75):
        dataset = stored[f"hardcore-filling-{filling:g}"]
        exact = -2 / np.pi * np.sin(np.pi * filling)
        assert abs(dataset["energy"].item() - exact) <= 3 * dataset["energy_error"].item() + 1e-6
        assert dataset["one_body"].values[0, 1] == pytest.approx(-exact / 2, abs=1e-4)
        assert dataset["one_body_exponent"].values[0] == pytest.approx(0.5, abs=0.02)


@pytest.mark.parametrize("U12", [-8.0, -4.0, 4.0, 8.0])
def test_errors_cover_lieb_and_wu(stored, U12):
    """Finite hard-core mixtures, extrapolated, against Lieb & Wu, PRL 20, 1445 (1968): within three stated errors."""
    kind = "pair" if U12 < 0 else "counter"
    dataset = stored[f"hardcore-{kind}-half-U12-{U12:g}"]
    error = dataset["energy_error"].item()
    assert abs(dataset["energy"].item() - chains.mixture_energy(1.0, U12)) <= 3 * error
    assert error < 5e-3


@pytest.mark.parametrize(
    ("name", "channel", "U12"),
    [
        ("counter-U20-U12-5", "antipair", 5.0),
        ("counter-U20-U12-10", "antipair", 10.0),
        ("counter-U20-U12-15", "antipair", 15.0),
        ("pair-U20-U12--10", "pair", 10.0),
    ],
)
def test_exponents_deep_in_the_insulator_are_those_of_the_spin_chain(stored, name, channel, U12):
    """eta = 1/(2K) = arccos(2 |U12|/U - 1)/pi of the XXZ chain (Bethe ansatz; couplings of Kuklov & Svistunov 2003),
    for anti-pairs and, half filled, for pairs. t/U = 1/20: higher orders shift it; 0.03 allowed (own runs: 0.01)."""
    exact = 1 / (2 * chains.counterflow_luttinger(20.0, U12))
    dataset = stored[name]
    assert dataset[f"{channel}_exponent"].item() == pytest.approx(exact, abs=0.03)
    other = "pair" if channel == "antipair" else "antipair"
    assert dataset[f"{other}_algebraic"].item() == 0.0
    assert (dataset["one_body_algebraic"].values == 0).all()


def test_what_did_not_settle_claims_no_exponent(stored):
    for name, dataset in stored.items():
        if "middle_pair" in dataset and not dataset["converged"].values[-1] and float(dataset["phase"]) != Phase.NORMAL:
            assert not np.isfinite(dataset["pair_exponent_error"].item()), name
            assert "luttinger" not in dataset, name
