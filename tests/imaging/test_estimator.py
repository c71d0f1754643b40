"""The estimator on stacks of known content, and synthetic shots as files."""

from pathlib import Path

import numpy as np
import pytest
from specimens import box

from gutz.errors import InputError, ResourceError
from gutz.imaging import shots as synthetic
from gutz.imaging.camera import Camera
from gutz.imaging.estimator import estimate
from gutz.scan import export

CAMERA = Camera(tof=4e-3, resolution=0.0, detection="counting", flight="lens")


def noise(count: int, side: int, seed: int, mean: float = 2.0) -> np.ndarray:
    return np.random.default_rng(seed).poisson(mean, (count, side, side)).astype(float)


def test_estimator_is_the_plain_sum() -> None:
    """A(d) against loops over shots and pixels (second implementation in plain numpy), both channels."""
    one, two = noise(6, 16, 0), noise(6, 16, 1)
    factor = [s.sum((1, 2)).mean() / s.sum((1, 2)) for s in (one, two)]
    means = [(f[:, None, None] * s).mean(0) for f, s in zip(factor, (one, two), strict=True)]
    away = [f[:, None, None] * s - m for f, s, m in zip(factor, (one, two), means, strict=True)]
    for channel in ("antipair", "pair"):
        found = estimate(one, two, channel, half=2, centre=(7.5, 7.5))
        for dy in (-2, 0, 1):
            for dx in (-1, 0, 2):
                top = bottom = 0.0
                for y in range(16):
                    for x in range(16):
                        v, u = (y + dy, x + dx) if channel == "antipair" else (15 - y + dy, 15 - x + dx)
                        if 0 <= v < 16 and 0 <= u < 16:
                            top += (away[0][:, y, x] * away[1][:, v, u]).mean() * 6 / 5
                            bottom += means[0][y, x] * means[1][v, u]
                assert found.correlation[dy + 2, dx + 2] == pytest.approx(top / bottom, abs=1e-12)


def test_a_common_signal_is_found_where_it_is() -> None:
    """Pixels that fluctuate together by 10 %: correlation 0.01 at lag (3, -1), nothing elsewhere."""
    rng = np.random.default_rng(2)
    common = 1 + 0.1 * rng.standard_normal((400, 40, 40))
    one = rng.poisson(50 * common)
    two = rng.poisson(50 * np.roll(common, (3, -1), (1, 2)))
    found = estimate(one, two, "antipair", half=4)
    peak = np.unravel_index(found.correlation.argmax(), found.correlation.shape)
    assert (found.lags[peak[0]], found.lags[peak[1]]) == (3, -1)
    assert found.correlation.max() == pytest.approx(0.01, rel=0.1)
    moved = estimate(one, two, "antipair", half=4, offset=(-1, 3))
    assert moved.peak == pytest.approx(0.01, rel=0.1)
    assert moved.significance > 20


def test_no_signal_is_not_significant_and_errors_are_right() -> None:
    """Independent Poisson pictures: standard error 1/sqrt(shots Σ μ²), and nothing above five of them."""
    one, two = noise(200, 32, 3), noise(200, 32, 4)
    found = estimate(one, two, "pair", half=3, centre=(15.5, 15.5))
    assert abs(found.significance) < 5
    assert found.error[3, 3] == pytest.approx(1 / np.sqrt(200 * 32 * 32 * 4), rel=0.15)


def test_fluctuating_numbers_leave_no_offset_when_normalised() -> None:
    """10 % of fluctuation common to both species: offset eps² = 0.01 without normalising, none with it."""
    rng = np.random.default_rng(5)
    factor = (1 + 0.1 * rng.standard_normal(600))[:, None, None] * np.full((600, 24, 24), 20.0)
    one, two = rng.poisson(factor), rng.poisson(factor)
    plain = estimate(one, two, "antipair", half=2, normalise=False)
    fair = estimate(one, two, "antipair", half=2)
    assert plain.correlation.mean() == pytest.approx(0.01, rel=0.2)
    assert abs(fair.correlation.mean()) < 1e-3


def test_shaking_pictures_are_recentred() -> None:
    """Pairs at opposite momenta in pictures that shake by two pixels: lost without recentring, found with it."""
    rng = np.random.default_rng(6)
    stacks = np.zeros((2, 150, 48, 48))
    for s in range(150):
        k = 5.0 * rng.standard_normal((4000, 2))
        shift = np.round(2.0 * rng.standard_normal(2)) / 2
        for a, sign in ((0, 1), (1, -1)):
            index = np.clip(np.floor(sign * k + shift + 24).astype(int), 0, 47)
            np.add.at(stacks[a, s], (index[:, 1], index[:, 0]), 1)
    still = estimate(*stacks, "pair", half=6)
    found = estimate(*stacks, "pair", half=6, recentre=True)
    assert found.correlation.max() > 2 * still.correlation.max()


def test_same_seed_same_pictures_and_atom_numbers() -> None:
    sample = box(10)
    first, again, other = (synthetic.shots(CAMERA, sample, "pair", 20, 64, seed=s) for s in (1, 1, 2))
    assert np.array_equal(first.first, again.first)
    assert not np.array_equal(first.first, other.first)
    mean = first.first.sum((1, 2)).mean()
    assert mean == pytest.approx(float(sample.atoms[0]), abs=5 * np.sqrt(float(sample.atoms[0]) / 20))


@pytest.mark.parametrize("sampling", synthetic.SAMPLINGS)
def test_files_of_shots_are_read_back(tmp_path: Path, sampling: str) -> None:
    camera = Camera(tof=4e-3, resolution=3e-6)
    stack = synthetic.shots(camera, box(8), "antipair", 4, 32, seed=3, sampling=sampling)
    made = synthetic.to_dataset(stack, camera, "antipair", 3, sampling)
    export.write_netcdf(made, tmp_path / "shots.nc")
    back = export.read_netcdf(tmp_path / "shots.nc")
    assert back["counts"].dims == ("species", "shot", "y", "x")
    assert np.array_equal(back["counts"].values[1], stack.second)
    assert back.attrs["sampling"] == sampling


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"first": np.zeros((3, 4))}, "first has the shape"),
        ({"second": noise(5, 20, 0)}, "second has the shape"),
        ({"first": noise(2, 20, 0), "second": None}, "first holds 2 shots; at least 3"),
        ({"first": np.full((5, 20, 20), np.nan)}, "pixels that are not finite"),
        ({"first": np.zeros((5, 20, 20))}, "no atoms in shot 0"),
        ({"half": 10}, "half is 10"),
        ({"channel": "pears"}, 'channel is "pears"'),
        ({"template": np.ones((3, 3))}, "template has the shape"),
        ({"half": 1, "template": np.ones((3, 3))}, "template is flat"),
    ],
)
def test_stacks_without_sense(change: dict[str, object], words: str) -> None:
    given = {"first": noise(5, 20, 0), "second": None, "half": 4, **change}
    if "second" in change and change["second"] is not None:
        given["first"] = noise(5, 24, 0)
    with pytest.raises(InputError, match=words):
        estimate(**given)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"count": 0}, "shots is 0; it must be at least 1"),
        ({"count": -3}, "shots is -3"),
        ({"side": 4}, "side is 4"),
        ({"sampling": "luck"}, 'sampling is "luck"'),
        ({"channel": "x"}, 'channel is "x"'),
    ],
)
def test_shots_without_sense(settings: dict[str, object], words: str) -> None:
    given = {"channel": "pair", "count": 2, "side": 32, **settings}
    with pytest.raises(InputError, match=words):
        synthetic.shots(CAMERA, box(8), **given)  # type: ignore[arg-type]


def test_more_pairs_than_atoms_and_too_large_stacks_are_refused() -> None:
    with pytest.raises(InputError, match="at most one tied pair per atom"):
        synthetic.shots(CAMERA, box(8, n=1.5), "pair", 2, 32)
    with pytest.raises(InputError, match="holds .* up to n_1 n_2"):
        synthetic.shots(CAMERA, box(8, n=0.1, height=5.0), "pair", 2, 32, sampling="fields")
    with pytest.raises(ResourceError, match="fewer shots"):
        synthetic.shots(CAMERA, box(8), "pair", 100_000, 256)
