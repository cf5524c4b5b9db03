"""Print the closure and coverage numbers of the demo: ``python tests/bench/closure.py``."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from closure import coverage_table, noise_free_percentiles

SEEDS = range(1, 21)


def main() -> None:
    """Print both tables."""
    print("recovered/true - 1 [%] without noise (percentiles 1, 16, 50, 84, 99)")
    for recipe in ("orrinda_short.toml", "orrinda_full.toml"):
        for name, values in noise_free_percentiles(recipe).items():
            print(f"  {recipe:18s} {name:10s}", " ".join(f"{v:8.4f}" for v in values))
    print(f"truth within 1 and 2 stated errors or intervals, {len(SEEDS)} noise seeds")
    for row in coverage_table(SEEDS):
        print(
            f"  {row.product:10s} S/N {row.snr:6s} {row.n:8d} pixels "
            f"{100 * row.within_1:6.2f} % {100 * row.within_2:6.2f} %"
        )


if __name__ == "__main__":
    main()
