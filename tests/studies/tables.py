"""Results tables of the studies: one row a survey, written as it is done, so that a study can be resumed."""

from __future__ import annotations

import csv
import os
import platform
import subprocess
from collections.abc import Callable, Iterable
from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd

HERE = Path(__file__).parent


def run_missing(
    path: Path, tasks: Iterable[int], work: Callable[[int], dict[str, float]], label: str
) -> pd.DataFrame:
    """Do the tasks that the table has no row for, in order, and return the whole table."""
    path.parent.mkdir(exist_ok=True)
    done = set(pd.read_csv(path)["survey"]) if path.exists() else set()
    for number in tasks:
        if number in done:
            continue
        row = {"survey": number, **work(number)}
        fresh = not path.exists()
        with path.open("a", newline="", encoding="utf-8") as file:
            writer = csv.DictWriter(file, list(row), lineterminator="\n")
            if fresh:
                writer.writeheader()
            writer.writerow({k: f"{v:.6g}" if isinstance(v, float) else v for k, v in row.items()})
        print(f"{label}: survey {number} done", flush=True)
    return pd.read_csv(path).sort_values("survey", ignore_index=True)


def machine() -> str:
    """Date, commit, processor and versions, for the head of a results page."""
    commit = subprocess.run(
        ["git", "rev-parse", "--short", "HEAD"], cwd=HERE, capture_output=True, text=True, check=False
    ).stdout.strip()
    model = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        names = [line for line in info.read_text().splitlines() if line.startswith("model name")]
        model = names[0].split(":", 1)[1].strip() if names else model
    return (
        f"{date.today().isoformat()}, commit {commit or 'unknown'}, {os.cpu_count()} cores of {model}, "
        f"Python {platform.python_version()}, numpy {np.__version__}"
    )


def shares_within(successes: int, trials: int) -> str:
    """A proportion with the standard error that comes with it."""
    p = successes / trials
    error = np.sqrt(p * (1 - p) / trials)
    return f"{successes} of {trials} ({100 * p:.0f} %, standard error {100 * error:.1f} %)"
