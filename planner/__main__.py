"""Entry point of the `nightfringe` command and of `python -m planner`."""

import os
import sys


def main() -> None:
    """Run the command line.

    One BLAS thread, set before numpy can be imported: on a small shared computer the default of one thread a core
    makes small linear algebra tens of times slower, not faster.
    """
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    from planner.cli.app import run

    sys.exit(run(sys.argv[1:]))


if __name__ == "__main__":
    main()
