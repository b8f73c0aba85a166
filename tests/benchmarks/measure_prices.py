"""Measure how good prices are: python -m tests.benchmarks.measure_prices [requests] [seed]."""

from __future__ import annotations

import math
import statistics
import sys

from tests.benchmarks.price_requests import Spent, affordable_sheets, machine, share_within, spent_on

COUNT = 240
SEED = 20


def _quantiles(spent: list[Spent]) -> str:
    ratios = sorted(one.ratio for one in spent)
    picked = (0.0, 0.05, 0.25, 0.5, 0.75, 0.95, 1.0)
    return ", ".join(f"{ratios[round(share * (len(ratios) - 1))]:.2f}" for share in picked)


def main() -> None:
    """Print predicted over actual processor time, and the requests that were priced worst."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else COUNT
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else SEED
    found = machine()
    print("factors of this machine:", {work: round(one, 2) for work, one in found.factors.items()})
    spent = [spent_on(sheet, found) for sheet in affordable_sheets(seed, count)]
    seconds = sum(one.actual for one in spent)
    print(f"{len(spent)} random requests, {seconds:.0f} s of processor time")
    print(f"priced within a factor 2: {100 * share_within(spent, 2.0):.1f} %")
    print(f"predicted over actual, least, 5, 25, 50, 75, 95 %, most: {_quantiles(spent)}")
    spread = statistics.pstdev(math.log(one.ratio) for one in spent)
    print(f"typical error: a factor {math.exp(spread):.2f}")
    for one in sorted(spent, key=lambda one: -abs(math.log(one.ratio)))[:8]:
        print(f"  {one.ratio:.2f}  {one.actual:.2f} s  {one.sheet.explicit()}")


if __name__ == "__main__":
    main()
