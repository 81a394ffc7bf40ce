"""Make the stored clean gathers of the demo survey again: `python -m synthetic_gathers.make_demo [FILE]`."""

from __future__ import annotations

import sys
from pathlib import Path

from synthetic_gathers.demo_survey import STORED, save_demo, simulate_demo


def main(arguments: list[str]) -> None:
    """Simulate all shots and store them, by default where the package keeps them."""
    path = Path(arguments[0]) if arguments else STORED
    path.parent.mkdir(parents=True, exist_ok=True)
    survey = simulate_demo(progress=lambda done, shots: print(f"shot {done} of {shots}", file=sys.stderr, flush=True))
    save_demo(path, survey)
    print(f"{path}: {path.stat().st_size / 1e6:.2f} MB")


if __name__ == "__main__":
    main(sys.argv[1:])
