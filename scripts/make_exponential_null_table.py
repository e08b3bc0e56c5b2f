"""Make kernelfit/diagnostics/exponential_null_table.py: KS distance of exponential gaps over their mean.

    python scripts/make_exponential_null_table.py            # writes the module; a few minutes on one core
    python scripts/make_exponential_null_table.py --check    # recomputes a few entries, compares

The probabilities are computed, not simulated. For intervals x_1..x_n divided by their mean, the KS distance
is below d exactly when every order statistic stays between two fixed boundaries, given that the intervals
sum to n. Durbin (1975, Biometrika 62, 5-22) turns the condition on the sum into a Fourier integral: the
mean of exp(-i w S) over the samples that stay inside, times exp(i w n), integrated over w and divided by
the density of the sum. For each w the inner mean is a count of points that crosses from boundary to
boundary, so a recursion over the 2n boundaries gives it: between two boundaries, a Poisson number of points
with a complex mean. In double precision the probability is good to about 1e-12, which leaves three digits
of a p-value of 1e-9. Simulation would need 1e15 samples for that, and Benjamini-Hochberg over hundreds of
units needs p-values far below the 0.001 where printed tables end.
"""

from __future__ import annotations

import argparse
import sys
from math import lgamma, log, pi, sqrt
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

MODULE = Path(__file__).resolve().parents[1] / "kernelfit" / "diagnostics" / "exponential_null_table.py"
SAMPLE_SIZES = (5, 6, 7, 8, 9, 10, 11, 12, 13, 15, 20, 30, 40, 50, 70, 100, 200, 500, 1000, 2500)
SCALED = tuple(round(0.30 + 0.05 * k, 2) for k in range(49))  # scaled distances, see `distance`
LOG_ODDS_END = 25.0  # beyond it double precision cannot tell the probability from 0 or 1
TAIL = 1e-14  # what each truncation of the Fourier sum may leave
FIRST_FREQUENCIES = 32
MOST_FREQUENCIES = 400_000


def distance(scaled: float, n: int) -> float:
    """KS distance at which the scaled distance of Stephens (1974, JASA 69, 730) takes this value."""
    return scaled / (sqrt(n) + 0.26 + 0.5 / sqrt(n)) + 0.2 / n


def probability_below(d: float, n: int) -> float:
    """P(D < d) for n exponential intervals divided by their mean (n at least 5)."""
    i = np.arange(1, n + 1)
    # Order statistic i of z = 1 - exp(-x) must lie above i/n - d and below (i - 1)/n + d.
    lowest = np.maximum(i / n - d, 0.0)
    highest = np.minimum((i - 1) / n + d, 1.0)
    if np.any(lowest >= highest):
        return 0.0
    # Aliases of the sum lie 2 pi / step apart: put the first where the gamma density has fallen to TAIL.
    beyond = 1.0
    while (n - 1) * log((n + beyond) / n) - beyond > log(TAIL):
        beyond *= 1.1
    step = 2 * pi / beyond
    log_density = (n - 1) * log(n) - n - lgamma(n)
    log_multiplicity = lgamma(n + 1) - n * log(n) + n  # from a Poisson number of points to exactly n
    total, done, size = 0.0, 0, FIRST_FREQUENCIES
    while done < MOST_FREQUENCIES:
        w = step * np.arange(done, done + size, dtype=np.float64)
        inside = mean_inside(w, lowest, highest) * np.exp(log_multiplicity)
        part = (inside * np.exp(1j * w * n)).real
        total += float(np.sum(part)) - (0.5 * float(part[0]) if done == 0 else 0.0)
        done += size
        # What the rest can hold: the last stretch once more, as it falls at least as fast as a power above 1.
        if size * np.max(np.abs(inside[-size // 4 :])) * step < TAIL:
            return step / pi * total / float(np.exp(log_density))
        size = min(2 * size, 8192)
    raise RuntimeError(f"The Fourier sum does not end at n={n}, d={d}.")


def mean_inside(
    w: NDArray[np.float64], lowest: NDArray[np.float64], highest: NDArray[np.float64]
) -> NDArray[np.complex128]:
    """Per frequency, mean of exp(-i w S) over the samples inside, times the Poisson weight of n at mean n."""
    n = lowest.size
    edges = np.unique(np.concatenate([[0.0], lowest, highest, [1.0]]))
    most = np.searchsorted(lowest, edges, side="left")  # points allowed by the time z = edge
    fewest = np.searchsorted(highest, edges, side="right")  # points required by then
    most[-1], fewest[-1] = n, n
    rate = 1.0 + 1j * w
    # n times the integral of exp(-rate x) between edges; x = -log(1 - z), and the last edge lies at infinity.
    fading = np.exp(rate * np.log1p(-edges[:-1])[:, np.newaxis])
    mass = n * -np.diff(fading, axis=0, append=0.0) / rate
    share = n * np.diff(edges)

    inside = np.zeros((n + 1, w.size), dtype=np.complex128)  # by number of points so far, and frequency
    inside[0] = 1.0
    low = high = 0
    for k in range(edges.size - 1):
        new_low, new_high = int(fewest[k + 1]), int(most[k + 1])
        fresh = np.zeros((new_high - new_low + 1, w.size), dtype=np.complex128)
        weight = np.full(w.size, np.exp(-share[k]), dtype=np.complex128)  # Poisson weight of m more points
        for m in range(new_high - low + 1):
            if m > 0:
                weight = weight * (mass[k] / m)
                if m > 4 and np.max(np.abs(weight)) < 1e-20:
                    break
            first, last = max(low, new_low - m), min(high, new_high - m)
            if first <= last:
                fresh[first + m - new_low : last + m - new_low + 1] += weight * inside[first : last + 1]
        inside[new_low : new_high + 1] = fresh
        low, high = new_low, new_high
    final: NDArray[np.complex128] = inside[n]
    return final


def log_odds(p_value: float) -> float:
    """log(p / (1 - p)), held between the ends that double precision can tell apart."""
    p = min(max(p_value, 0.0), 1.0)
    if p in (0.0, 1.0):
        return LOG_ODDS_END if p == 1.0 else -LOG_ODDS_END
    return min(max(log(p) - log(1.0 - p), -LOG_ODDS_END), LOG_ODDS_END)


def rows() -> list[tuple[float, list[float]]]:
    """1/sqrt(n) and the log odds at `SCALED`, from n without end (1/sqrt(n) = 0) to the smallest n."""
    computed = []
    for n in reversed(SAMPLE_SIZES):
        print(f"n = {n}", file=sys.stderr, flush=True)
        computed.append((1 / sqrt(n), [log_odds(1.0 - probability_below(distance(s, n), n)) for s in SCALED]))
    # The limit: a parabola in 1/sqrt(n) through the three largest samples, carried on to 0.
    x = np.array([c[0] for c in computed[:3]])
    y = np.array([c[1] for c in computed[:3]])
    at_zero = [
        float(np.prod([x[j] / (x[j] - x[i]) for j in range(3) if j != i])) for i in range(3)
    ]  # Lagrange's weights
    limit = np.clip(np.dot(at_zero, y), -LOG_ODDS_END, LOG_ODDS_END)
    return [(0.0, [float(v) for v in limit]), *computed]


HEADER = '''"""Log odds of the p-value of a KS distance when the mean of an exponential law is estimated.

Computed (not simulated) by scripts/make_exponential_null_table.py, where the method stands (Durbin 1975,
Biometrika 62, 5-22). Do not edit: change the script and run it.
"""

from __future__ import annotations

from typing import Final

# fmt: off
'''


def source(table: list[tuple[float, list[float]]]) -> str:
    """Text of the module."""

    def tuple_of(values: list[str], indent: str) -> str:
        lines, line = [], indent
        for value in values:
            piece = f"{value}, "
            if len(line) + len(piece) > 108:
                lines.append(line.rstrip())
                line = indent
            line += piece
        return "\n".join([*lines, line.rstrip()])

    parts = [HEADER]
    parts.append(
        "# Columns: scaled distance (D - 0.2/n) (sqrt(n) + 0.26 + 0.5/sqrt(n)) of Stephens (1974).\n"
    )
    parts.append("SCALED_DISTANCE: Final[tuple[float, ...]] = (\n")
    parts.append(tuple_of([f"{s:.2f}" for s in SCALED], "    ") + "\n)\n\n")
    parts.append(f"# log(p / (1 - p)), held within {LOG_ODDS_END:g} of 0; one row per sample size.\n")
    parts.append("SAMPLE_SIZES: Final[tuple[float, ...]] = (\n")
    parts.append(tuple_of(['float("inf")', *(str(n) for n in reversed(SAMPLE_SIZES))], "    ") + "\n)\n")
    parts.append("LOG_ODDS: Final[tuple[tuple[float, ...], ...]] = (\n")
    for _, values in table:
        parts.append("    (\n" + tuple_of([f"{v:.4f}" for v in values], "        ") + "\n    ),\n")
    parts.append(")\n# fmt: on\n")
    return "".join(parts)


def check() -> int:
    """Recompute a few entries; the exit status is 1 where the module differs by more than its rounding."""
    from kernelfit.diagnostics import exponential_null_table as kept

    worst = 0.0
    for n in (5, 20, 100, 500):
        for s in SCALED[5:36:10]:
            row = kept.LOG_ODDS[kept.SAMPLE_SIZES.index(n)]
            fresh = log_odds(1.0 - probability_below(distance(s, n), n))
            worst = max(worst, abs(fresh - row[kept.SCALED_DISTANCE.index(s)]))
    print(f"largest difference in log odds {worst:.2e}")
    return int(worst > 1e-4)


def main() -> int:
    """Write the module, or check the one that is there."""
    parser = argparse.ArgumentParser(
        description="Table of the KS distance when an exponential mean is estimated."
    )
    parser.add_argument("--check", action="store_true", help="recompute a few entries instead of writing")
    if parser.parse_args().check:
        return check()
    MODULE.write_text(source(rows()), encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
