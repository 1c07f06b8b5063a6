"""Every problem of the zoo, over its meshes and, where it matters, the control weight."""

from ssn.benchmarking import suite

ALPHAS = [1e-4, 1e-5, 1e-6]
globals().update(suite("../../problems", parameters={"sparse_elliptic": {"alpha": ALPHAS}}))
