"""How long does a spread over all default combinations take?

Run: python tests/benchmarks/spread_speed.py [rows] [draws]

The accreting rows of the invented population; 200 combinations of laws, every coefficient draw
included, wall clock on two threads. Beside it, what repeating the chain for every combination and
draw would take, extrapolated from one full pass.
"""

from __future__ import annotations

import sys
import time

from embersift import mock
from embersift.recipe import Recipe
from embersift.screening import screen_table
from embersift.spread import DRAWS, default_combinations, spread


def main() -> None:
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else 100_000
    draws = int(sys.argv[2]) if len(sys.argv) > 2 else DRAWS
    recipe = Recipe()
    # every row accretes, which is the most work: mock rows without a feeding hole are left out
    table = mock.population(2 * rows, 1).query("mdot > 0").head(rows).reset_index(drop=True)
    number = len(default_combinations(recipe))
    screen_table(table, recipe)
    start = time.perf_counter()
    screen_table(table, recipe)
    once = time.perf_counter() - start
    start = time.perf_counter()
    found = spread(table, recipe, draws=draws)
    taken = time.perf_counter() - start
    start = time.perf_counter()
    lines = len(found.table()), len(found.ranking()), len(found.between_laws())
    shown = time.perf_counter() - start
    print(f"{len(table):,} rows (all accreting), {number} combinations, {draws} draws")
    print(
        f"spread                     {taken:8.2f} s, and {shown:.2f} s for tables of {lines} rows"
    )
    print(f"chain for each, estimated  {once * number * (draws + 1):8.0f} s ({once:.3f} s a pass)")


if __name__ == "__main__":
    main()
