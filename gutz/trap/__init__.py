"""Clouds in a trap: local density, atom numbers, entropy, loading; and what an experiment sees of them."""
