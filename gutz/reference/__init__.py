"""Reference entries: quasi-exact chains, made from a plan, kept in one file with checksums.

In:  a plan (TOML).
Out: `store.Store`, a netCDF file with one group per entry; `gutz.compare` reads it. What an entry says of the
     infinite chain, and how well, is worked out in `bulk`.
"""
