"""Whole posterior fits until R-hat is below 1.01 and effective sample sizes above 400, by the clock.

    python tests/benchmarks/converge.py [design ...] [--ten-thousand]

Designs as in tests/validation/designs.py, in its ragged reserve of 100 ha; a first fit compiles and is not
counted. With --ten-thousand also design 3 in a reserve so large that about 10,000 points lie in it (some
twenty minutes). Written to tests/benchmarks/CONVERGE.md.
"""

from __future__ import annotations

import argparse
import os
import resource
import sys
import time
from pathlib import Path

import numpy as np
import shapely

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE.parent), str(HERE.parent / "studies"), str(HERE.parent / "validation")]
from designs import DESIGNS, reserve_of_100_ha
from tables import machine

import geoclust as gc
from geoclust.models.patterns import draw_pattern


def fitted(design: int, area: gc.StudyArea, words: str) -> str:
    """A row of the table."""
    rho, mu, sigma = DESIGNS[design - 1]
    truth = gc.Thomas(parent_intensity=rho * 1e-4, sigma=sigma, mean_offspring=mu)
    drawn, sampled = np.random.default_rng([5000 + design - 1, 1]).spawn(2)
    survey = gc.Survey(draw_pattern(truth, area, drawn).points + area.origin, area)
    start, before = time.perf_counter(), time.process_time()
    fit = gc.fit_clusters(survey, rng=sampled)
    clock, processor = time.perf_counter() - start, time.process_time() - before
    diagnostics = fit.choices["diagnostics"].values()  # type: ignore[attr-defined]
    r_hat = max(d["r_hat"] for d in diagnostics)
    size = min(d["effective_sample_size"] for d in diagnostics)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return (
        f"| {words} | {survey.n:,} | {clock:.1f} | {processor:.1f} | {r_hat:.3f} | {size:.0f} "
        f"| {'yes' if fit.choices['converged'] else 'no'} | {peak:.0f} |"
    )


def main() -> None:
    """Fit, and write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("design", type=int, nargs="*", default=[1, 3])
    parser.add_argument("--ten-thousand", action="store_true")
    arguments = parser.parse_args()
    area = reserve_of_100_ha()
    fitted(1, area, "compile")
    rows = [fitted(d, area, f"design {d}") for d in arguments.design]
    if arguments.ten_thousand:
        factor = np.sqrt(10_000 / 800)
        large = gc.StudyArea(shapely.transform(area.polygon, lambda at: (at - area.origin) * factor))
        rows.append(fitted(3, large, "design 3, 10,000 points"))
    head = [
        "# Time until a posterior fit has converged",
        "",
        f"{machine()}, load {os.getloadavg()[0]:.1f} at the end. Command: tests/benchmarks/converge.py.",
        "",
        "| survey | points | seconds | processor seconds | R-hat, worst | effective sample size, worst "
        "| converged | peak memory so far, MiB |",
        "|---|---|---|---|---|---|---|---|",
    ]
    text = "\n".join([*head, *rows, ""])
    (HERE / "CONVERGE.md").write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
