"""Fluctuations around a solution: excitations, momentum distributions, what a product of sites misses."""

from gutz.fluctuations.layer import Correlations, GaussianLayer
from gutz.fluctuations.sites import LocalSites, local_sites

__all__ = ["Correlations", "GaussianLayer", "LocalSites", "local_sites"]
