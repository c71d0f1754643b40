"""Speed of clouds within one run: python tests/bench/cloud.py [sites per side]

In:  the loading curve of scans/rubidium-cloud.toml (20 depths, 10^5 atoms); a lattice of side³ sites at T = 0.
Out: on stdout: seconds of the curve, with compilation and without; seconds of the site-resolved ground state, and
     of the plain numpy loop over sites (one sweep measured on every 50th site, times the sweeps that the loop takes
     on a small lattice of the same cloud), and their ratio.
"""

import sys
import time
from pathlib import Path

import numpy as np
import plain_loop
import plain_sites

from gutz.inhomogeneous import solve_sites
from gutz.model import Mixture
from gutz.scan import clouds, document, spec
from gutz.scan.plan import plan
from gutz.trap import loading

FILE = Path(__file__).parents[2] / "scans" / "rubidium-cloud.toml"
T_HOP, U12, MU, N_MAX = 0.02, 0.7, np.array([0.85, 0.83]), 3


def curve() -> float:
    """Solve all clouds of the file, without margins; seconds."""
    asked = list(clouds.points(plan(spec.check(document.read(FILE)))))
    begin = time.perf_counter()
    solved = list(loading.follow([point.point for point in asked]))
    seconds = time.perf_counter() - begin
    assert len(solved) == 20
    return seconds


def potential(side: int, edge: float = 20.0) -> np.ndarray:
    """An eighth of a round cloud that fills the lattice, both species alike."""
    row = (np.arange(side) + 0.5) * edge / side
    r2 = row[:, None, None] ** 2 + row[None, :, None] ** 2 + row[None, None] ** 2
    return np.stack([0.0025 * r2] * 2)


def plain_seconds(side: int, sweeps: int) -> float:
    """Time of the plain loop over side³ sites, from every 50th site of one sweep."""
    V = potential(side).reshape(2, -1).T[::50]
    energy = plain_loop.site_energies(np.ones((len(V), 2)), np.full(len(V), U12), MU - V, N_MAX)
    links = [[(i + k) % len(V) for k in range(1, 7)] for i in range(len(V))]
    phi = np.full((len(V), 2), 0.5)
    begin = time.perf_counter()
    plain_sites.sweep(phi, energy, links, T_HOP, 0.0, plain_loop.PlainSite(N_MAX).operators)
    return (time.perf_counter() - begin) * 50 * sweeps


def sweeps_needed(side: int = 8, tolerance: float = 1e-6) -> int:
    """Sweeps of the plain loop on a small lattice of the same depth of potential, to a change of 1e-6."""
    V = potential(side).reshape(2, -1).T
    energy = plain_loop.site_energies(np.ones((len(V), 2)), np.full(len(V), U12), MU - V, N_MAX)
    links = plain_sites.neighbours((side,) * 3)
    phi = np.full((len(V), 2), 0.7)
    operators = plain_loop.PlainSite(N_MAX).operators
    count = 1
    while plain_sites.sweep(phi, energy, links, T_HOP, 0.0, operators) > tolerance:
        count += 1
    return count


def main() -> None:
    """Measure and print."""
    side = int(sys.argv[1]) if len(sys.argv) > 1 else 46
    mixture = Mixture(t=T_HOP, U=1.0, U12=U12, mu=0.0, n_max=N_MAX)
    for name in ("with compilation", "again"):
        begin = time.perf_counter()
        found = solve_sites(mixture, potential(side), MU, 0.0)
        ours = time.perf_counter() - begin
        print(f"{side**3:,} sites at T = 0, {name}: {ours:.1f} s, {found.steps} steps, converged {found.converged}")
    sweeps = sweeps_needed()
    plain = plain_seconds(side, sweeps)
    print(f"plain loop over sites: {plain:.0f} s for {sweeps} sweeps (as on 8³ sites); ratio {plain / ours:.0f}")
    first, cpu = curve(), time.process_time()
    again = curve()
    cpu = time.process_time() - cpu
    seconds = f"with compilation: {first:.0f} s; again: {again:.0f} s ({cpu:.0f} s of cpu)"
    print(f"loading curve, 20 depths, 10^5 atoms, {seconds}")


if __name__ == "__main__":
    main()
