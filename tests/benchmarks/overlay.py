"""Time of the exact overlap of polygons and cells, against exactextract.

    python tests/benchmarks/overlay.py [--polygons 100] [--points 400] [--step 0.5] [--json]

Wobbly polygons of 2 to 12 degrees are laid over a global grid. exactextract gives the planar share
of a cell, Stook that on the sphere, so the two differ by up to a part in a thousand where a border
crosses a cell; the areas are compared with the exact area of each polygon. With ``--json`` the last
line is one JSON object: seconds, seconds_exactextract, ratio, largest_area_error (relative, Stook),
largest_area_error_planar.
"""

from __future__ import annotations

import argparse
import json
import time

import exactextract
import geopandas as gpd
import numpy as np
import shapely
from exactextract.raster import NumPyRasterSource
from stook.grids.cells import cell_areas
from stook.grids.overlay import coverage, sphere_area


def invented_polygons(count: int, points: int) -> list[shapely.Geometry]:
    """Return polygons with smooth, uneven outlines, all over the globe."""
    random = np.random.default_rng(7)
    angle = np.linspace(0, 2 * np.pi, points, endpoint=False)
    found = []
    for _ in range(count):
        lon, lat = random.uniform(-160, 160), random.uniform(-60, 60)
        size = random.uniform(1, 6)
        wobble = sum(
            random.normal(0, 0.3 / k) * np.cos(k * angle + random.uniform(0, 6.28))
            for k in range(2, 12)
        )
        radius = size * np.exp(wobble - np.abs(wobble).max() * 0.2)
        ring = [lon + radius * np.cos(angle), lat + radius * np.sin(angle)]
        found.append(shapely.Polygon(np.column_stack(ring)))
    return found


def main() -> None:
    """Print the table and, with ``--json``, the keys."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--polygons", type=int, default=100)
    parser.add_argument("--points", type=int, default=400)
    parser.add_argument("--step", type=float, default=0.5)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    polygons = invented_polygons(given.polygons, given.points)
    lat = np.linspace(-90, 90, round(180 / given.step) + 1)
    lon = np.linspace(-180, 180, round(360 / given.step) + 1)
    areas = cell_areas(lat, lon) / 6371.0**2
    coverage(polygons[0], lat, lon)  # compiles
    start = time.perf_counter()
    shares = [coverage(polygon, lat, lon) for polygon in polygons]
    seconds = time.perf_counter() - start
    exact = np.array([sphere_area(polygon) for polygon in polygons])
    ours = np.array([(share * areas).sum() for share in shares])
    frame = gpd.GeoDataFrame({"n": range(len(polygons))}, geometry=polygons, crs=4326)
    source = NumPyRasterSource(
        np.zeros(areas.shape), -180, -90, 180, 90, srs_wkt=frame.crs.to_wkt()
    )
    start = time.perf_counter()
    table = exactextract.exact_extract(source, frame, ["cell_id", "coverage"], output="pandas")
    other = time.perf_counter() - start
    north_first = areas[::-1].ravel()
    planar = np.array(
        [
            (north_first[cells] * part).sum()
            for cells, part in zip(table["cell_id"], table["coverage"], strict=True)
        ]
    )
    error, planar_error = (np.abs(found / exact - 1).max() for found in (ours, planar))
    print(f"{given.polygons} polygons of {given.points} points on {areas.shape} cells")
    print("| overlap | s | largest error of area |\n|---|---|---|")
    print(f"| on the sphere | {seconds:.3f} | {error:.1e} |")
    print(f"| exactextract, planar share | {other:.3f} | {planar_error:.1e} |")
    if given.json:
        result = {
            "seconds": round(seconds, 4),
            "seconds_exactextract": round(other, 4),
            "ratio": round(seconds / other, 2),
            "largest_area_error": float(error),
            "largest_area_error_planar": float(planar_error),
        }
        print(json.dumps(result))


if __name__ == "__main__":
    main()
