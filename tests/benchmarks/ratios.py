"""Speed of the geometry and the pair sums, as ratios to general-purpose libraries.

Run from the top of the repository, on an idle machine:

    python tests/benchmarks/ratios.py [--write]

Every ratio compares two timings of the same run, each the best of several
after a warm-up. With --write the table in tests/benchmarks/RESULTS.md is
replaced; a run that misses a limit ends with exit status 1.
"""

from __future__ import annotations

import argparse
import os
import platform
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from datetime import date
from pathlib import Path

import numpy as np
import shapely
from scipy.spatial import cKDTree
from shapely.affinity import translate

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent))

import known_areas

from geoclust.area.study_area import StudyArea
from geoclust.area.survey import Survey
from geoclust.curves.envelopes import randomness_envelopes
from geoclust.curves.second_order import SecondOrder, default_radii

# what the table holds: task, measured, limit, remark
Row = tuple[str, float, str, float, str]


def best(work: Callable[[], object], repeats: int = 5) -> float:
    """Shortest of several timings, in seconds, after one for warming up."""
    work()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def reference(points: int, seed: int = 1) -> tuple[Survey, np.ndarray]:
    """Uniform points in the ragged reserve and 100 radii up to 38 neighbours of a point."""
    area = StudyArea(known_areas.ragged_reserve())
    xy = area.uniform_points(points, seed)
    largest = np.sqrt(38 / (np.pi * points / area.area))
    return Survey(xy, area), np.linspace(0, largest, 101)[1:]


def k_and_g(survey: Survey, radii: np.ndarray) -> None:
    # the bandwidth takes part in the largest distance: g at the last radius needs pairs beyond it
    measured = SecondOrder.of_points(survey.area.local(survey.xy), survey.area, radii, radii[-1] / 20)
    measured.k_values()
    measured.g_values()


def pairs() -> list[Row]:
    rows: list[Row] = []
    survey, radii = reference(100_000)
    tree = cKDTree(survey.xy)
    ours = best(lambda: k_and_g(survey, radii))
    theirs = best(lambda: tree.count_neighbors(tree, radii), 2)
    rows.append(
        ("K and g, isotropic, 100,000 points, over scipy's count_neighbors", ours / theirs, "<", 0.12,
         f"{ours * 1e3:.0f} ms, {theirs * 1e3:.0f} ms")
    )  # fmt: skip
    for edge_weight in ("unweighted", "translation", "rigid-motion", "minus-sampling"):
        other = best(
            lambda w=edge_weight: SecondOrder.of_points(
                survey.local_xy, survey.area, radii, radii[-1] / 20, w
            ).g_values(),
            3,
        )
        rows.append(
            (f"the same, {edge_weight}", other / theirs, "", np.inf, f"{other * 1e3:.0f} ms, tables built")
        )
    # ten times the points at the same density, so in a reserve of ten times the area
    grown = StudyArea(shapely.transform(known_areas.ragged_reserve(), lambda at: at * np.sqrt(10)))
    many = Survey(grown.uniform_points(1_000_000, 2), grown)
    rows.append(
        ("ten times the points, same density: time over time", best(lambda: k_and_g(many, radii), 3) / ours,
         "<", 11.0, "")
    )  # fmt: skip
    rows.append(
        ("memory beyond the coordinates, bytes a point", memory_a_point(), "<", 100.0,
         "rise of the peak from 1 to 3 million points")
    )  # fmt: skip
    return rows


def memory_a_point() -> float:
    """Rise of the peak resident memory with the number of points, without the coordinates."""
    peaks = []
    for count in (1_000_000, 3_000_000):
        out = subprocess.run(
            [sys.executable, __file__, "--peak", str(count)], check=True, capture_output=True, text=True
        )
        peaks.append(int(out.stdout))
    return (peaks[1] - peaks[0]) / 2e6


def print_peak(count: int) -> None:
    """Rise of the peak by K and g of `count` points, in bytes (run in a process of its own)."""
    survey, radii = reference(1000)
    k_and_g(survey, radii)
    survey, radii = reference(count)
    local = survey.local_xy
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    measured = SecondOrder.of_points(local, survey.area, radii, radii[-1] / 20)
    measured.k_values()
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print((after - before) * 1024)


def circles() -> list[Row]:
    polygon = known_areas.ragged_reserve()
    area = StudyArea(polygon)
    centres, radii = known_areas.random_circles(polygon, 200_000, np.random.default_rng(3), 300.0)
    ours = best(lambda: area.circle_shares(centres, radii)) / len(radii)
    # as fine as drawing errors of 1e-8 or so need it
    corners = 80_000
    t = np.linspace(0, 2 * np.pi, corners + 1)[:-1]
    unit = np.column_stack([np.cos(t), np.sin(t)])

    def drawn_share(centre: np.ndarray, radius: float) -> float:
        circle = shapely.LinearRing(centre + radius * unit)
        return shapely.intersection(circle, polygon).length / circle.length

    some = list(zip(centres[:60], radii[:60], strict=True))
    theirs = best(lambda: [drawn_share(c, r) for c, r in some], 3) / 60
    shares = [drawn_share(c, r) for c, r in some]
    error = np.abs(area.circle_shares(centres[:60], radii[:60]) - shares).max()
    rows: list[Row] = [
        ("circle shares: drawing one finely and shapely's intersection over one of ours", theirs / ours,
         ">", 10_000.0, f"{ours * 1e6:.3f} µs, {theirs * 1e3:.2f} ms with {corners:,} corners; "
         f"largest difference {error:.0e}")
    ]  # fmt: skip
    # per circle with 8,000 and with 76,000 vertices: radii in units of the mean length of an edge
    costs = []
    for name in ("finland", "new york"):
        polygon = known_areas.NAMED[name]()
        area = StudyArea(polygon)
        edge = area.perimeter / area.edges
        rng = np.random.default_rng(4)
        # about the boundary, where all the work is
        on = area._starts[rng.integers(area.edges, size=200_000)] + area.origin
        centres = on + rng.normal(0, 5 * edge, on.shape)
        costs.append(best(lambda a=area, c=centres, e=edge: a.circle_shares(c, 8 * e)) / len(centres))
    rows.append(
        ("circle shares beside the boundary, 76,000 vertices over 8,000", costs[1] / costs[0], "<", 1.5,
         f"{costs[0] * 1e6:.2f} µs, {costs[1] * 1e6:.2f} µs; radius of 8 mean edges")
    )  # fmt: skip
    return rows


def covariances() -> list[Row]:
    polygon = known_areas.ragged_reserve()
    area = StudyArea(polygon)
    rng = np.random.default_rng(5)
    size = np.sqrt(area.area)
    rows: list[Row] = []
    for name, share, limit in (("a thousandth", 1e-3, np.inf), ("a hundredth", 1e-2, np.inf),
                               ("any shift up to a half", None, 50.0)):  # fmt: skip
        far = size * (0.5 * np.sqrt(rng.uniform(0, 1, 2000)) if share is None else np.full(2000, share))
        turn = rng.uniform(0, 2 * np.pi, 2000)
        shifts = far[:, None] * np.column_stack([np.cos(turn), np.sin(turn)])
        ours = best(lambda s=shifts: area.set_covariance(s, workers=1)) / 2000
        few = shifts[:40]
        theirs = best(
            lambda s=few: [shapely.intersection(polygon, translate(polygon, *h)).area for h in s], 3
        ) / len(few)
        exact = np.array([shapely.intersection(polygon, translate(polygon, *h)).area for h in few])
        error = np.abs(area.set_covariance(few) - exact).max() / area.area
        label = f"{name} of the size"
        rows.append(
            (f"set covariance, {label}: shapely's overlay over one of ours (one thread)", theirs / ours,
             ">" if share is None else "", limit,
             f"{ours * 1e6:.0f} µs, {theirs * 1e3:.2f} ms; largest difference {error:.0e} of the area")
        )  # fmt: skip
    for name, far in (("a quarter of the size", 0.25 * size), ("the diameter", area.diameter)):
        radii = np.linspace(0, far, 201)[1:]
        took = best(lambda r=radii: area.isotropic_set_covariance(r))
        start = time.process_time()
        area.isotropic_set_covariance(radii)
        busy = time.process_time() - start
        turn = (np.arange(720) + 0.5) / 720 * np.pi
        u = np.column_stack([np.cos(turn), np.sin(turn)])
        some = radii[::20]
        mean = np.array([area.set_covariance(r * u).mean() for r in some])
        error = np.abs(area.isotropic_set_covariance(some) - mean).max() / area.area
        rows.append(
            (f"isotropised set covariance, 200 radii up to {name}, seconds", took, "<", 1.0,
             f"{busy:.2f} s of processor time; largest difference to the mean of 720 directions "
             f"{error:.0e} of the area")
        )  # fmt: skip
    return rows


def envelopes() -> list[Row]:
    """Cost of one simulated pattern of an envelope of g, simulation and weights included."""
    rows: list[Row] = []
    survey, near = reference(2_500)
    far = default_radii(survey.area)
    tree = cKDTree(survey.xy)
    for radii, words in ((near, "38 neighbours"), (far, "a quarter of the side, the default")):
        theirs = best(lambda r=radii: tree.count_neighbors(tree, r), 3)
        for weight in ("isotropic", "rigid-motion"):
            ours = best(
                lambda r=radii, w=weight: randomness_envelopes(
                    survey, r, functions=("g",), simulations=99, edge_weight=w, rng=1
                ),
                2,
            )
            # isotropic weights at long range are costly, and what rigid-motion weights are for
            limited = weight == "rigid-motion" or radii is near
            rows.append(
                (f"envelope of g, 2,500 points to {words}, {weight}: a pattern over count_neighbors",
                 ours / 99 / theirs, "<" if limited else "", 0.5,
                 f"{ours / 99 * 1e3:.1f} ms, {theirs * 1e3:.1f} ms; all threads")
            )  # fmt: skip
    return rows


def report(rows: list[Row]) -> str:
    lines = [
        "# Results of the benchmarks",
        "",
        f"{date.today().isoformat()}, {machine()}. Written by `python tests/benchmarks/ratios.py --write`.",
        "",
        "| task | measured | limit | remark |",
        "|---|---|---|---|",
    ]
    for task, value, sign, limit, remark in rows:
        bound = f"{sign} {limit:,g}" if sign else ""
        lines.append(f"| {task} | {value:,.3g} | {bound} | {remark} |")
    return "\n".join(lines) + "\n"


def machine() -> str:
    model = platform.processor() or platform.machine()
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        lines = [line for line in cpuinfo.read_text().splitlines() if line.startswith("model name")]
        model = lines[0].split(":")[1].strip() if lines else model
    return (
        f"{model}, {len(os.sched_getaffinity(0))} cores, {platform.system()}, "
        f"Python {platform.python_version()}, load {os.getloadavg()[0]:.1f} at the end"
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--write", action="store_true", help="replace the table in RESULTS.md")
    parser.add_argument("--peak", type=int, help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.peak:
        print_peak(given.peak)
        return 0
    rows = [*pairs(), *circles(), *covariances(), *envelopes()]
    text = report(rows)
    print(text)
    if given.write:
        (HERE / "RESULTS.md").write_text(text, encoding="utf-8")
    missed = [r[0] for r in rows if (r[2] == "<" and r[1] >= r[3]) or (r[2] == ">" and r[1] <= r[3])]
    for task in missed:
        print(f"misses its limit: {task}", file=sys.stderr)
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
