"""A folder of problem files as a suite of asv benchmarks.

A benchmark module of five lines, in the folder that asv.conf.json calls `benchmark_dir`:

    from ssn.benchmarking import suite

    globals().update(suite("../my_problems", parameters={"plate": {"alpha": [1e-4, 1e-6]}}))

Each problem file becomes two classes, named after the file. For ``plate.py``:

- ``Plate``: ``time_solve`` (a fresh problem each time: factorisation included, assembly excluded), ``peakmem_solve``
  and ``peakmem_setup``, the same process without the solve, which is to be subtracted;
- ``PlateFigures``: figures that repeat exactly, lower being better throughout: `FIGURES` lists them.

The cases are the file's `SIZES` times the lists in `parameters`. The figures of a case are computed once a run, in
whichever process needs them first, and kept in the directory that `setup_cache` makes; a case that raises does so in
each of its figures and in no other case. `version` holds the version of what is measured here and the file's own
``VERSION`` ("1" where it has none): raise it when the problem changes, so that old results are not compared.
"""

from .figures import FIGURES
from .remembered import CaseFailedError, remembered
from .suite import suite

__all__ = ["FIGURES", "CaseFailedError", "remembered", "suite"]
