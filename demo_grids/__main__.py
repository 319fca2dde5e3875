"""``python -m demo_grids FOLDER``: write the invented world into a folder."""

from __future__ import annotations

import argparse
import sys

from demo_grids.domain import SIZES
from demo_grids.world import SEED, generate


def main(arguments: list[str] | None = None) -> int:
    """Write a world as the command line asks; return the exit status."""
    parser = argparse.ArgumentParser(prog="python -m demo_grids", description=__doc__)
    parser.add_argument("folder", help="where to write; made if it is not there")
    parser.add_argument("--size", choices=list(SIZES), default="demo")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--pixels", type=int, help="about how many pixels the grid has")
    parser.add_argument("--years", type=int, help="years of the simulations, from 1981 on")
    given = parser.parse_args(arguments)
    try:
        path = generate(
            given.folder, given.size, given.seed, given.pixels, given.years, progress=_show
        )
    except (ValueError, OSError) as error:
        print(f"error: {error}", file=sys.stderr)
        return 1
    print(path)
    return 0


def _show(done: int, parts: int, what: str) -> None:
    print(f"{done:3d}/{parts} {what}", file=sys.stderr)


if __name__ == "__main__":
    sys.exit(main())
