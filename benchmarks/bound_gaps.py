"""How far bounds and policies lie from the exact optimum of small networks.

``python -m benchmarks.bound_gaps --cases 24`` solves drawn networks of two or three legs state by state
(`tests.oracle`). It prints, as shares of that optimum, the mean and the worst gap of every bound, and of policies
that accept a fare when it reaches the sum of the leg values.
"""

from __future__ import annotations

import click
import numpy as np

from tests.heuristics.test_bounds import chain
from tests.oracle import leg_trails, policy_revenue


@click.command()
@click.option("--cases", type=click.IntRange(1), default=24, show_default=True)
def main(cases: int) -> None:
    """Print the gaps as a Markdown table."""
    gaps: dict[str, list[float]] = {}

    def note(label: str, figure: float, exact: float) -> None:
        gaps.setdefault(label, []).append(figure / exact - 1)

    for seed in range(cases):
        found = chain(seed)
        case, exact = found.case, found.value
        note("deterministic program", found.bounds.linear, exact)
        note("decomposition, the best single leg", found.bounds.one_leg, exact)
        note("decomposition, all legs that no product joins", found.bounds.legs_apart, exact)
        note("fares split by bid prices", found.bounds.split, exact)
        note("best fare splits", found.split.bound, exact)
        for label, shares in (("decomposition", found.products.adjusted_fare), ("fare splits", found.split.share)):
            trails = leg_trails(case.network, found.products, shares, case.periods)
            note(f"policy by seat values of the {label}", policy_revenue(case, trails), exact)
    print(f"| {cases} drawn networks | mean | worst |\n| --- | --- | --- |")
    for label, figures in gaps.items():
        worst = figures[int(np.argmax(np.abs(figures)))]
        print(f"| {label} | {np.mean(figures):+.1%} | {worst:+.1%} |")


if __name__ == "__main__":
    main()
