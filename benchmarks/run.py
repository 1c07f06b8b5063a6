"""Run the asv suite against the installed ssn and publish it as web pages.

    python benchmarks/run.py quick          # one mesh a problem, every benchmark once: minutes
    python benchmarks/run.py full           # all meshes and weights, repeated: within the hour
    python benchmarks/run.py quick --bench Obstacle

Needs ssn, asv and asv_runner in the environment of the Python that runs this (pip install -e '.[bench,problems,test]').
Results belong to the commit that is checked out and lie in benchmarks/.asv/, pages in benchmarks/.asv/html/. asv asks
for a description of the machine once; this script lets it take the defaults, which go into ~/.asv-machine.json.

Counts may be compared between machines, ratios of seconds within one run only roughly, seconds not at all.

Exit code 0: every benchmark has a result; 1: some failed, and are named, or there were none; 2: unusable set-up.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import subprocess
import sys
import time
from itertools import product
from pathlib import Path

HERE = Path(__file__).resolve().parent
ROOT = HERE.parent
# The mesh of the quick pass: of each problem the middle one. asv matches against "module.Class.method(parameters)".
PEERS = r"peers\.Peers\..*\(64[,)]"
CHOICE = r"""
from ssn.benchmarking import suite
for name, kind in suite({problems!r}).items():
    meshes = dict(zip(kind().param_names, kind().params)).get("n")
    mesh = "" if not meshes else str(meshes[(len(meshes) - 1) // 2]) + "[,)]"
    print(r"zoo\." + name + r"\..*" + (r"\(" + mesh if mesh else ""))
"""


def main() -> int:
    """Run, publish, report."""
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("extent", choices=["quick", "full"])
    parser.add_argument("--bench", help="only benchmarks with this regular expression in their name")
    parser.add_argument(
        "--results", type=Path, help="folder for results and pages instead of benchmarks/.asv"
    )
    options = parser.parse_args()
    problem = unusable()
    if problem:
        print(problem, file=sys.stderr)
        return 2
    commit = output("git", "rev-parse", "HEAD")
    config = configuration(options.results)
    began = time.monotonic()
    asv(config, "machine", "--yes")
    choice = ["--quick"] if options.extent == "quick" else []
    # one expression: asv combines several by "or"
    wanted = f"(?=.*(?:{options.bench or ''}))"
    wanted += quick() if options.extent == "quick" else ""
    code = asv(
        config, "run", *choice, "--bench", wanted, "--environment", f"existing:{sys.executable}",
        "--set-commit-hash", commit, "--show-stderr",
    )  # fmt: skip
    asv(config, "publish")
    succeeded, failed = tally(config, commit)
    print(
        f"{succeeded} results in {time.monotonic() - began:.0f} s; pages: {config.parent / '.asv' / 'html'}"
    )
    for name in failed:
        print(f"failed: {name}")
    if code not in (0, 2) or not succeeded:
        print(f"asv ended with exit code {code}" if code else "there are no results")
        return 1
    return 1 if failed or code else 0


def clean() -> dict[str, str]:
    """The environment without PYTHONPATH, which asv removes, and with one BLAS thread."""
    threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    return {key: value for key, value in os.environ.items() if key != "PYTHONPATH"} | threads


def quick() -> str:
    """The expression that chooses the cases of the quick pass."""
    code = CHOICE.format(problems=str(ROOT / "problems"))
    command = [sys.executable, "-c", code]
    found = subprocess.run(command, env=clean(), capture_output=True, text=True, check=True).stdout
    return "(" + "|".join([PEERS, *found.split()]) + ")"


def unusable() -> str:
    """What is missing in the environment under test."""
    for module, package in (("ssn", "-e ."), ("asv", "'ssn[bench]'"), ("asv_runner", "'ssn[bench]'")):
        command = [sys.executable, "-c", f"import {module}"]
        if subprocess.run(command, env=clean(), cwd="/", capture_output=True, check=False).returncode:
            return f"{module} is not installed in {sys.executable}: pip install {package}"
    return ""


def configuration(results: Path | None) -> Path:
    """The configuration file: ours, or a copy that writes elsewhere."""
    own = HERE / "asv.conf.json"
    if results is None:
        return own
    lines = [line for line in own.read_text("utf-8").splitlines() if not line.lstrip().startswith("//")]
    settings = json.loads("\n".join(lines))
    settings |= {"repo": str(ROOT), "benchmark_dir": str(HERE / "suite")}
    results.mkdir(parents=True, exist_ok=True)
    copy = results.resolve() / "asv.conf.json"
    copy.write_text(json.dumps(settings, indent=4), "utf-8")
    return copy


def asv(config: Path, *arguments: str) -> int:
    """Run asv; return its exit code."""
    command = [sys.executable, "-m", "asv", arguments[0], "--config", str(config), *arguments[1:]]
    return subprocess.run(command, env=clean(), cwd=config.parent, check=False).returncode


def output(*command: str) -> str:
    """What a command prints."""
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True).stdout.strip()


def tally(config: Path, commit: str) -> tuple[int, list[str]]:
    """Number of results of the commit, and the names of cases without one."""
    succeeded, failed = 0, []
    for path in sorted((config.parent / ".asv" / "results").glob(f"*/{commit[:8]}-*.json")):
        data = json.loads(path.read_text("utf-8"))
        for name, row in data["results"].items():
            entry = dict(zip(data["result_columns"], row, strict=False))
            cases = list(product(*entry["params"])) or [()]
            values = entry["result"] or [None] * len(cases)
            for case, value in zip(cases, values, strict=True):
                if value is None:
                    failed.append(f"{name}({', '.join(case)})")
                elif not math.isnan(value):  # asv's mark of a case that was not chosen
                    succeeded += 1
    return succeeded, failed


if __name__ == "__main__":
    sys.exit(main())
