"""How the compiled work runs: interrupted at once, compiled once."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PREAMBLE = f"""
import sys
sys.path.insert(0, {str(ROOT / "tests")!r})
import numpy as np
from geoclust.area.study_area import StudyArea
from geoclust.curves.pair_sums import pair_sums
from known_areas import ragged_reserve
area = StudyArea(ragged_reserve())
few = area.local(area.uniform_points(50, 1))
"""
# minutes of work each, once what it needs is compiled
LONG = {
    "isotropic pairs": "pair_sums({xy}, area, np.array([600.0]), workers={workers})",
    "circle shares": "area.circle_shares(np.tile({xy}, (40, 1)) + area.origin, 700.0, workers={workers})",
    "set covariance": "area.set_covariance({xy}, workers={workers})",
}


@pytest.mark.parametrize(
    ("job", "workers"),
    [("isotropic pairs", 1), ("isotropic pairs", 2), ("circle shares", 2), ("set covariance", 1)],
)
def test_an_interrupt_stops_it(job: str, workers: int):
    work = LONG[job]
    script = PREAMBLE + textwrap.dedent(
        f"""
        {work.format(xy="few", workers=workers)}
        many = area.local(area.uniform_points(1_500_000, 1))
        print("begin", flush=True)
        {work.format(xy="many", workers=workers)}
        print("end", flush=True)
        """
    )
    run = subprocess.Popen(
        [sys.executable, "-c", script], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=ROOT
    )
    try:
        assert run.stdout is not None
        assert run.stdout.readline() == "begin\n"
        time.sleep(0.7)
        assert run.poll() is None
        run.send_signal(signal.SIGINT)
        out, err = run.communicate(timeout=300)
    finally:
        run.kill()
    assert "end" not in out
    assert "KeyboardInterrupt" in err


def test_kernels_are_read_from_disk_by_the_next_process():
    script = PREAMBLE + textwrap.dedent(
        """
        from geoclust.area import _circles, _covariance, _edges, _gaussian, _isotropised
        from geoclust.curves import _pairs, _weighted_pairs
        for edge_weight in ("isotropic", "translation", "rigid-motion", "minus-sampling"):
            pair_sums(few, area, np.array([5.0, 90.0]), edge_weight=edge_weight)
        area.set_covariance(few)
        area.circle_shares(few + area.origin, 50.0)
        area.gaussian_shares(few + area.origin, 50.0)
        area.distance_to_boundary(few + area.origin)
        used = [
            _pairs.add_pairs, _pairs.add_isotropic_excess, _weighted_pairs.add_shifted_pairs,
            _weighted_pairs.add_deep_pairs, _circles.share_many, _gaussian.gaussian_many,
            _edges.distance_many, _covariance.covariance_many, _isotropised.add_run_pairs,
        ]
        print(sum(sum(f.stats.cache_hits.values()) for f in used),
              sum(sum(f.stats.cache_misses.values()) for f in used), len(used))
        """
    )
    environment = {k: v for k, v in os.environ.items() if k != "NUMBA_DISABLE_JIT"}
    for _ in range(2):
        out = subprocess.run(
            [sys.executable, "-c", script], check=True, capture_output=True, text=True, cwd=ROOT,
            env=environment,
        ).stdout.split()  # fmt: skip
    hits, misses, used = (int(v) for v in out)
    # compiled by this process at the latest, so that the second one finds all of them
    assert misses == 0
    assert hits >= used
