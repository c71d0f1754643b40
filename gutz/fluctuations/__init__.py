"""Fluctuations around a solution: excitations, momentum distributions, what a product of sites misses."""

from gutz.fluctuations.layer import Correlations, GaussianLayer
from gutz.fluctuations.sites import LocalSites, local_sites
from gutz.fluctuations.spectrum import Spectrum, spectrum
from gutz.fluctuations.thermodynamics import OneLoop, one_loop

__all__ = [
    "Correlations",
    "GaussianLayer",
    "LocalSites",
    "OneLoop",
    "Spectrum",
    "local_sites",
    "one_loop",
    "spectrum",
]
