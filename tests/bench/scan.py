"""Scans at scale, as ratios within one run: python tests/bench/scan.py workers|stream|adaptive [points per side]

In:  scan files written here: two species (workers, stream) and one species (adaptive), product ansatz.
Out: on stdout:
     workers: wall and processor time between the first and the last chunk, with one worker process and with two;
     stream: time per point and peak memory of grids of N/4 and N points, in place (1000 a side for 10^6 points);
     adaptive: points solved against those of the dense grid, labels that differ, errors of the numbers filled in, and
     the error of the boundary against its closed form, on either grid.
On a machine that others use too, wall times say little: the processor time beside them tells how much of it we got.
"""

import resource
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from gutz.phases import Phase
from gutz.scan import adaptive, open_run, runner

MIXTURE = """\
[mixture]
unit = "U"
U = 1.0
U12 = 0.5
T = 0.05
n_max = 3
[axes.mu]
parameter = "mixture.mu"
start = -0.2
stop = 1.4
points = {side}
[axes.t]
parameter = "mixture.t"
start = 0.005
stop = 0.06
points = {side}
"""
LOBES = """\
[mixture]
species = 1
unit = "U"
U = 1.0
T = 0.0
n_max = 9
[axes.t]
parameter = "mixture.t"
start = 0.0
stop = 0.04
points = {side}
[axes.mu]
parameter = "mixture.mu"
start = 0.02
stop = 2.98
points = {side}
"""


def workers(folder: Path, side: int) -> None:
    """Two worker processes against one."""
    found = {}
    for count in (1, 2, 1, 2):
        times: list[float] = []
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        outcome = runner.run(
            _file(folder, MIXTURE, side), folder / f"{count}", workers=count, force=True,
            progress=lambda done, total, times=times: times.append(time.perf_counter()),
        )  # fmt: skip
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        wall = (times[-1] - times[count - 1]) / (len(times) - count)
        processor = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
        found[count] = min(wall, found.get(count, np.inf))
        print(
            f"{count} worker(s): {outcome.points} points, {wall * 1e3:.0f} ms per chunk once running; "
            f"{processor:.1f} s of processor time in workers, loading included; {outcome.peak_bytes / 1e6:.0f} MB"
        )
    same = all(
        (folder / "1" / path.relative_to(folder / "2")).read_bytes() == path.read_bytes()
        for path in (folder / "2" / "data.zarr").rglob("c/**/*")
        if path.is_file()
    )
    print(f"best of two each: two workers {found[1] / found[2]:.2f} times as fast as one; same bytes: {same}")


def stream(folder: Path, side: int) -> None:
    """Time and memory against points."""
    runner.run(_file(folder, MIXTURE, 64), folder / "first")
    for size in (side // 2, side):
        begin, processor = time.perf_counter(), time.process_time()
        outcome = runner.run(_file(folder, MIXTURE, size), folder / f"{size}")
        wall, processor = time.perf_counter() - begin, time.process_time() - processor
        print(
            f"{outcome.points} points in {outcome.chunks} chunks: {wall / outcome.points * 1e6:.0f} us per point "
            f"({processor / outcome.points * 1e6:.0f} us of processor), peak memory {outcome.peak_bytes / 1e6:.0f} MB"
        )


def refined(folder: Path, side: int) -> None:
    """Solves and boundary error of the refined and of the dense grid."""
    file = _file(folder, LOBES, side)
    outcome, found = adaptive.run(file, folder / "refined")
    runner.run(file, folder / "dense")
    dense = open_run(folder / "dense")
    print(
        f"{outcome.points} points: {outcome.solves} solved, {outcome.points / outcome.solves:.1f} times fewer; "
        f"labels that differ: {int((dense.phase.values != found.phase.values).sum())}"
    )
    for name in ("filling", "condensate", "free_energy"):
        error = np.abs(dense[name].values - found[name].values)
        print(f"  {name}: filled with a mean error of {error.mean():.1e}, at worst {error.max():.1e}")
    for name, grid in (("refined", found), ("dense", dense)):
        print(f"  {name}: boundary off by at most {_boundary_error(grid):.2f} spacings of the grid")


def _boundary_error(grid) -> float:
    """Largest distance along t of the lobes' edge from 6 t = (n - mu)(mu - n + 1)/(1 + mu), in spacings.

    Fisher et al., Phys. Rev. B 40, 546 (1989); Sheshadri et al., Europhys. Lett. 22, 257 (1993).
    """
    t, mu = grid.t.values, grid.mu.values
    n = np.ceil(mu)
    exact = (n - mu) * (mu - n + 1) / (1 + mu) / 6
    inside = (grid.phase.values == Phase.MOTT).sum(0)
    measured = t[0] + (inside - 0.5) * (t[1] - t[0])
    return float(np.max(np.abs(measured - exact)[inside > 0]) / (t[1] - t[0]))


def _file(folder: Path, text: str, side: int) -> Path:
    path = folder / f"{side}.toml"
    path.write_text(text.format(side=side))
    return path


def main() -> None:
    """Run the one asked for."""
    kinds = {"workers": (workers, 128), "stream": (stream, 1000), "adaptive": (refined, 257)}
    if len(sys.argv) < 2 or sys.argv[1] not in kinds:
        sys.exit(__doc__)
    kind, side = kinds[sys.argv[1]]
    with tempfile.TemporaryDirectory() as folder:
        kind(Path(folder), int(sys.argv[2]) if len(sys.argv) > 2 else side)


if __name__ == "__main__":
    main()
