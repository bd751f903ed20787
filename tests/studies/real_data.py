"""The whole job on open data, of which two are regular.

Each goes through `geoclust analyse` as a user would call it, with seed 1; the folder is opened again with
fiona, rasterio and a JSON reader. The data and their sources: tests/data/README.md. Resumable:

    python tests/studies/real_data.py
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import fiona
import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
import shapely
from tables import machine, run_missing

HERE = Path(__file__).parent
DATA = HERE.parent / "data"
PLANE = ["--crs", "local", "--x-column", "x", "--y-column", "y"]
NAMES = {
    1: "brambles, age 0", 2: "tree crowns", 3: "craters of Mars", 4: "places of Luxembourg",
    5: "caveolae", 6: "cell nuclei",
}  # fmt: skip


def box(folder: Path, width: float, height: float) -> str:
    """A rectangle as the study area, in a plane with no place on Earth."""
    path = folder / "area.gpkg"
    gpd.GeoDataFrame(geometry=[shapely.box(0, 0, width, height)]).to_file(path, layer="area")
    return str(path)


def arguments(number: int, folder: Path) -> list[str]:
    """Layers and how to read them."""
    if number == 1:
        canes = pd.read_csv(DATA / "brambles.csv")
        points = folder / "brambles.csv"
        canes[canes["age"] == 0].assign(x=lambda t: 9 * t["x"], y=lambda t: 9 * t["y"]).to_csv(points)
        return [str(points), box(folder, 9, 9), *PLANE]
    if number == 2:
        return [str(DATA / "tree_crowns_yell_px2299x2472.csv"), box(folder, 2299, 2472), *PLANE]
    if number == 3:
        crs = (DATA / "mars_pickering_crs.txt").read_text(encoding="utf-8")
        return [str(DATA / "mars_pickering_craters.csv"), str(DATA / "mars_pickering_area.gpkg"),
                "--crs", crs, "--x-column", "x", "--y-column", "y"]  # fmt: skip
    if number == 4:
        return [str(DATA / "lux_places_epsg4326.csv"), str(DATA / "lux_epsg4326.gpkg"), "--crs", "EPSG:4326",
                "--x-column", "lon", "--y-column", "lat", "--covariate",
                str(DATA / "lux_elev_epsg4326.tif")]  # fmt: skip
    file, side = ("caveolae.csv", 500) if number == 5 else ("nuclei_px512.csv", 512)
    return [str(DATA / file), box(folder, side, side), *PLANE]


def one(number: int) -> dict[str, object]:
    """Run one data set and read its folder."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        out = folder / "results"
        program = [sys.executable, "-m", "geoclust", "analyse", *arguments(number, folder)]
        before, start = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
        done = subprocess.run(
            [*program, "--out", str(out), "--seed", "1", "--quiet"],
            capture_output=True,
            text=True,
            check=False,
        )
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        record = json.loads((out / "fit.json").read_text(encoding="utf-8"))
        layers = sorted(fiona.listlayers(out / "results.gpkg"))
        row: dict[str, object] = {
            "data": NAMES[number], "exit_status": done.returncode, "status": record["status"],
            "points": len(gpd.read_file(out / "results.gpkg", layer="points")),
            "method": record["method"] or "", "layers": " ".join(layers),
            "page_bytes": (out / "report.html").stat().st_size,
            "processor_s": round(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime),
            "clock_s": round(time.perf_counter() - start),
        }  # fmt: skip
        shown = record["status"] == "ok"
        scale = (record["parameters"] or {}).get("sigma", {}) if shown else {}
        row |= {"sigma_m": scale.get("value", ""), "sigma_low": scale.get("lower_95", ""),
                "sigma_high": scale.get("upper_95", "")}  # fmt: skip
        raster = out / "centre_intensity.tif"
        row["map"] = int(raster.exists())
        row["centres"] = ""
        if raster.exists():
            with rasterio.open(raster) as bands:
                mean = bands.read(1, masked=True)
                # the map's mean over its cells; the edge cells are partly outside, so nearly the number
                row["centres"] = round(
                    float(np.ma.mean(mean)) * bands.res[0] * bands.res[1] * mean.count() / 1e4, 1
                )
    return row


def main() -> None:
    """Run what is missing and write the page of results."""
    results = HERE / "results"
    table = run_missing(results / "real_data.csv", NAMES, one, "real data")  # type: ignore[arg-type]
    lines = [
        "# Open data through `geoclust analyse`",
        "",
        f"{machine()}. Command: tests/studies/real_data.py. Seed 1, everything else as it comes.",
        "",
        "| data | points | exit status | status | method | sigma (m), 95 % | map, centres about "
        "| processor s |",
        "|---|---|---|---|---|---|---|---|",
    ]
    for _, row in table.iterrows():
        sigma = "" if pd.isna(row["sigma_m"]) else (
            f"{row['sigma_m']:.4g} ({row['sigma_low']:.4g} to {row['sigma_high']:.4g})")  # fmt: skip
        shown = f"yes, {row['centres']:.0f}" if row["map"] else "no"
        method = "" if pd.isna(row["method"]) else row["method"]
        lines.append(
            f"| {row['data']} | {row['points']} | {row['exit_status']} | {row['status']} | {method} "
            f"| {sigma} | {shown} | {row['processor_s']} |"
        )
    (results / "real_data.md").write_text("\n".join([*lines, ""]), encoding="utf-8")
    print("\n".join(lines))


if __name__ == "__main__":
    main()
