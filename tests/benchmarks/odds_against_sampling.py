"""How fast are the odds, beside sampling?

Run: python tests/benchmarks/odds_against_sampling.py [rows]

The same rows in one process and one thread, one observation and one threshold: `odds`, and the
Monte Carlo that one would write (10,000 draws a row, whole arrays). Processor time, so that a busy
machine does not count; medians of five. The errors of both are measured against themselves: the
odds against a million draws for 200 rows, the sampling against the odds.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from embersift.odds import Scatter, odds

DRAWS = 10_000
SAMPLED_ROWS = 400
Array = NDArray[np.float64]


def sources(rows: int, seed: int = 1) -> dict[str, Array]:
    """Rows that are in doubt: medians within 0.5 dex or so of every bound."""
    random = np.random.default_rng(seed)
    flux_agn = 1e-16 * 10 ** random.normal(0.0, 0.5, rows)
    return {
        "flux_agn": flux_agn,
        "flux_background": 0.5 * flux_agn * 10 ** random.normal(0.0, 0.5, rows),
        "lx_agn": 1e39 * 10 ** random.normal(0.0, 0.5, rows),
    }


def sampled(
    rows: dict[str, Array], scatter: Scatter, draws: int, seed: int, flux_of: str, limit: float
) -> Array:
    """The Monte Carlo, for limit, floor 1e39 erg/s and threshold 2."""
    random = np.random.default_rng(seed)
    result = np.empty(rows["flux_agn"].size)
    for i, (agn, background, lx) in enumerate(zip(*rows.values(), strict=True)):
        k, v, b = (10 ** (s * random.standard_normal(draws)) for s in vars(scatter).values())
        # vars() is in the order agn, background, variability
        v, b = b, v
        flux = agn * k * v
        dark = background * b
        counted = flux + dark if flux_of == "total" else flux
        result[i] = np.mean((counted >= limit) & (lx * k >= 1e39) & (flux >= 2.0 * dark))
    return result


def seconds(work: Callable[[], Any], repeats: int = 5) -> float:
    taken = []
    for _ in range(repeats):
        start = time.process_time()
        work()
        taken.append(time.process_time() - start)
    return statistics.median(taken)


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 200_000
    rows = sources(count)
    some = {name: values[:SAMPLED_ROWS] for name, values in rows.items()}
    few = {name: values[:200] for name, values in rows.items()}
    print(f"{'case':34} {'odds rows/s':>12} {'draws rows/s':>12} {'ratio':>7} {'errors':>18}")
    for case, scatter, flux_of in (
        ("k and background", Scatter(0.3, 0.3), "agn"),
        ("k, background, variability", Scatter(0.3, 0.3, 0.2), "agn"),
        ("all three, flux_of = total", Scatter(0.3, 0.3, 0.2), "total"),
    ):
        choice: dict[str, Any] = {
            "flux_limit": 1e-16, "floor": 1e39, "threshold": 2.0, "scatter": scatter,
            "flux_of": flux_of,
        }  # fmt: skip
        exact = odds(**some, **choice)
        fast = count / seconds(lambda: odds(**rows, **choice))  # noqa: B023
        slow = SAMPLED_ROWS / seconds(
            lambda: sampled(some, scatter, DRAWS, 2, flux_of, 1e-16),  # noqa: B023
            3,
        )
        rough = sampled(some, scatter, DRAWS, 2, flux_of, 1e-16)
        fine = sampled(few, scatter, 1_000_000, 3, flux_of, 1e-16)
        error = np.sqrt(np.mean((exact[:200] - fine) ** 2))
        draws_error = np.sqrt(np.mean((exact - rough) ** 2))
        print(
            f"{case:34} {fast:12,.0f} {slow:12,.0f} {fast / slow:7,.0f} "
            f"{error:8.1e} {draws_error:8.1e}"
        )
    print("errors (rms): odds minus 1e6 draws (the draws' own, 3e-4), 1e4 draws minus odds")


if __name__ == "__main__":
    main()
