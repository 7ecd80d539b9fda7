"""`python -m distill` and the console command `voc-distill`."""

from __future__ import annotations

import os
import sys


def main() -> int:
    """Run the command line; on a light installation say in one line what is missing."""
    # Before OpenMP loads: threads that wait by spinning slow training many times over on busy cores.
    os.environ.setdefault("OMP_WAIT_POLICY", "PASSIVE")
    try:
        from distill.cli import run

        return run(sys.argv[1:])
    except ModuleNotFoundError as e:
        if (e.name or "").partition(".")[0] == "distill":
            raise
        print(
            f"voc-distill: error: the command line needs the train extra (no module {e.name!r}): "
            "pip install '.[train]' in a checkout of voc-distill",
            file=sys.stderr,
        )
        return 2


if __name__ == "__main__":
    sys.exit(main())
