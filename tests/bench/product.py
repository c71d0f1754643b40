"""Speed of the product solver as ratios within one run: python tests/bench/product.py [points per side]

In:  a grid of hopping and chemical potential, two species, n_max = 3, T > 0 (10^4 points by default).
Out: a table on stdout: microseconds per point of gutz, of the plain numpy loop and of the same loop with stacked
     eigenproblems, their ratios, the accuracy of each, compilations during the run, and peak memory against points.
The plain loops run on every 25th point (they take minutes otherwise) and are scaled by the number of points.
"""

import resource
import sys
import time

import jax
import numpy as np
import plain_loop

import gutz

T, U12, Z, N_MAX = 0.05, 0.5, 6, 3


def grid(side: int) -> tuple[np.ndarray, np.ndarray]:
    """Hopping and chemical potential over lobes and superfluid, flattened."""
    t, mu = np.meshgrid(np.linspace(0.005, 0.06, side), np.linspace(-0.2, 1.4, side), indexing="ij")
    return t.ravel(), mu.ravel()


def ours(t: np.ndarray, mu: np.ndarray) -> gutz.Solution:
    """The same points through the public door."""
    return gutz.solve(gutz.Mixture(t=t, U=1.0, U12=U12, mu=mu, T=T, dim=3, n_max=N_MAX))


def main() -> None:
    """Measure and print."""
    side = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    t, mu = grid(side)
    begin = time.perf_counter()
    ours(t[:4096], mu[:4096])
    first = time.perf_counter() - begin
    compiled: list[float] = []
    jax.monitoring.register_event_duration_secs_listener(
        lambda event, seconds, **_: compiled.append(seconds) if event.endswith("backend_compile_duration") else None
    )
    begin, cpu = time.perf_counter(), time.process_time()
    sol = ours(t, mu)
    wall, cpu = time.perf_counter() - begin, time.process_time() - cpu
    per_point = wall / t.size * 1e6
    print(f"gutz, {t.size} points: {per_point:.0f} us per point ({cpu / t.size * 1e6:.0f} us of processor)")
    print(f"  first call with compilation {first:.1f} s; compilations after it: {len(compiled)}")

    some = np.arange(0, t.size, 25)
    energy = plain_loop.site_energies(
        np.ones((some.size, 2)), np.full(some.size, U12), np.stack([mu[some]] * 2, 1), N_MAX
    )
    zt = np.stack([Z * t[some]] * 2, 1)
    for name, method in (("plain loop", plain_loop.loop), ("stacked loop", plain_loop.stacked)):
        begin = time.perf_counter()
        _, F, solves = method(energy, zt, T, N_MAX)
        each = (time.perf_counter() - begin) / some.size * 1e6
        worse = F - sol.free_energy[some]
        print(
            f"{name}: {each:.0f} us per point, {solves / some.size:.0f} eigenproblems each; "
            f"ratio {each / per_point:.1f}; "
            f"its F is higher by more than 1e-9 at {np.sum(worse > 1e-9)} of {some.size} points, "
            f"lower at {np.sum(worse < -1e-9)}"
        )
    print(f"worst residual of gutz {sol.residual.max():.1e}; of the loops by construction 1e-10")
    peak = _peak_memory()
    ours(np.tile(t, 4), np.tile(mu, 4))
    print(f"peak memory {peak:.0f} MB, after four times the points {_peak_memory():.0f} MB")


def _peak_memory() -> float:
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


if __name__ == "__main__":
    main()
