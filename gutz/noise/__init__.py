"""Noise-correlation maps of every phase: what averages of n_a(k) n_b(k') over many pictures show."""

from gutz.noise.features import Feature, features, order_of
from gutz.noise.grid import Grid, NoiseMap
from gutz.noise.maps import cloud_map, maps, noise_map
from gutz.noise.moments import LocalMoments, local_moments
from gutz.noise.product import ProductMap
from gutz.noise.recipes import Validity
from gutz.noise.series import noise_series

__all__ = [
    "Feature",
    "Grid",
    "LocalMoments",
    "NoiseMap",
    "ProductMap",
    "Validity",
    "cloud_map",
    "features",
    "local_moments",
    "maps",
    "noise_map",
    "noise_series",
    "order_of",
]
