"""Detection: from what a lattice holds to pictures, signal, noise and the number of shots needed. Import the modules.

In:  a camera, a sample (what a solution or a cloud says about order), or a stack of pictures.
Out: expected correlations and their noise, synthetic shots, estimates from pictures, better settings.
"""
