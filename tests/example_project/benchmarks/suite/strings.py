"""Every problem of the folder, over its meshes and two stiffnesses."""

from ssn.benchmarking import suite

globals().update(suite("../../problems", parameters={"string_over_bed": {"stiffness": [1e3, 1e5]}}))
