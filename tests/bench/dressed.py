"""Speed of the dressed solver as ratios within one run: python tests/bench/dressed.py [points per side]

In:  a grid of hopping and chemical potential over lobes and superfluid, two species, n_max = 3, T > 0, for repelling
     and for attracting species (10^4 points each by default).
Out: a table on stdout: milliseconds per point of the dressed solver and of the plain numpy loop for the *product*
     ansatz on the same points, their ratios in processor time and on the clock, compilations after the first call.
The plain loop runs on every 25th point, in pieces between those of the solver, so that other work on the machine
slows both alike.
"""

import sys
import time

import jax
import numpy as np
import plain_loop
import product

import gutz

PIECE = 2048


def dressed(t: np.ndarray, mu: np.ndarray, U12: float) -> gutz.Solution:
    """The same points through the public door."""
    mixture = gutz.Mixture(t=t, U=1.0, U12=U12, mu=mu, T=product.T, dim=3, n_max=product.N_MAX)
    return gutz.solve(mixture, ansatz="dressed")


def plain(t: np.ndarray, mu: np.ndarray, U12: float) -> None:
    """The loop of the product ansatz."""
    both = np.stack([mu] * 2, 1)
    energy = plain_loop.site_energies(np.ones((t.size, 2)), np.full(t.size, U12), both, product.N_MAX)
    plain_loop.loop(energy, np.stack([product.Z * t] * 2, 1), product.T, product.N_MAX)


def main() -> None:
    """Measure and print."""
    side = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    t, mu = product.grid(side)
    some = np.arange(0, t.size, 25)
    begin = time.perf_counter()
    dressed(t[:PIECE], mu[:PIECE], product.U12)
    print(f"first call with compilation, {min(PIECE, t.size)} points: {time.perf_counter() - begin:.1f} s")
    compiled: list[float] = []
    jax.monitoring.register_event_duration_secs_listener(
        lambda event, seconds, **_: compiled.append(seconds) if event.endswith("backend_compile_duration") else None
    )
    for U12 in (product.U12, -product.U12):
        spent = np.zeros((2, 2))
        labels = np.zeros(0, int)
        for piece in range(0, t.size, PIECE):
            for row, work in enumerate((slice(piece, piece + PIECE), some[(some >= piece) & (some < piece + PIECE)])):
                clock, processor = time.perf_counter(), time.process_time()
                if row == 0:
                    labels = np.append(labels, np.asarray(dressed(t[work], mu[work], U12).phase))
                else:
                    plain(t[work], mu[work], U12)
                spent[row] += time.perf_counter() - clock, time.process_time() - processor
        each = spent / np.array([[t.size], [some.size]]) * 1e3
        names = {str(p): int(n) for p, n in zip(*np.unique(labels, return_counts=True), strict=True)}
        print(f"U12 = {U12}: {t.size} points, labels {names}")
        for row, name in enumerate(("dressed", "plain product loop")):
            print(f"  {name}: {each[row, 1]:.2f} ms of processor time per point, {each[row, 0]:.2f} ms on the clock")
        print(f"  ratio {each[1, 1] / each[0, 1]:.2f} in processor time, {each[1, 0] / each[0, 0]:.2f} on the clock")
    print(f"compilations after the first call: {len(compiled)}")


if __name__ == "__main__":
    main()
