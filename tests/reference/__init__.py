"""An independent, deliberately naive reference in plain NumPy and SciPy.

Nothing here imports the package under test, and no method is shared with it:
second quantisation is done on the full Fock space with Kronecker products, the
exclusion polytope by listing every configuration of the sector.  Small sizes only.
"""
