"""How fast the likelihood is: ``python -m tests.benchmarks.likelihood [--json FILE]``.

Everything is a ratio of two measurements taken in turns in one process with one BLAS thread; each
ratio is the median over the rounds. Processor time is counted, so that what else the machine does
is left out. "vs george" is george's time over ours (larger is better), "vs flop bound" ours over
the time that the Cholesky factorisation of the dense covariance of three series, (3 N)^3 / 3
operations, takes at the rate of a matrix product of that size (smaller is better).

This module starts itself anew where the environment would let numpy start with other settings, so
it imports nothing heavy.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from pathlib import Path

__all__ = ["main"]

_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
_UNSET = ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE", "SCREENER_NUMBA")


def _settle_environment(arguments: list[str]) -> None:
    """Restart with one thread per library and without overrides, unless that is so already."""
    wanted = {k: v for k, v in os.environ.items() if k not in _UNSET}
    wanted.update(dict.fromkeys(_ONE_THREAD, "1"))
    if wanted != dict(os.environ):
        command = [sys.executable, "-m", "tests.benchmarks.likelihood", *arguments]
        os.execve(sys.executable, command, wanted)


def main(arguments: list[str] | None = None) -> None:
    """Print the table; write the figures where asked."""
    arguments = sys.argv[1:] if arguments is None else arguments
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, help="write the figures here")
    options = parser.parse_args(arguments)
    _settle_environment(arguments)
    from tests.benchmarks.likelihood_measure import measure

    figures = measure()
    if options.json:
        options.json.write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
