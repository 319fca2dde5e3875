"""Region files of many kinds, good and bad."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from region_inputs import POLYGONS, write_assessment, write_polygons
from stook.assessment.load import load_assessment
from stook.assessment.schema import Assessment
from stook.constants import OUTSIDE
from stook.errors import InputError
from stook.grids.overlay import coverage, sphere_area
from stook.regions.overlay import region_problems, run_grid
from stook.regions.polygons import area_km2, read_regions, unwrap, within_180

LAEA = "+proj=laea +lat_0=45.5 +lon_0=7 +datum=WGS84 +units=km"


def load(folder: Path, *regions: str, **spec: object) -> Assessment:
    """Load an assessment whose section `regions` has the values of `spec`."""
    path = write_assessment(folder, systems=("rainfed",), regions=spec)
    return load_assessment(path, regions=regions)


def rewrite(folder: Path, shapes: dict[str, shapely.Geometry], **options: object) -> Assessment:
    assessment = load(folder)
    (folder / "regions.gpkg").unlink()
    write_polygons(folder / "regions.gpkg", shapes, **options)
    return assessment


def messages(assessment: Assessment, severity: str) -> list[str]:
    return [str(p) for p in region_problems(assessment) if p.severity == severity]


@pytest.mark.parametrize("name", ["regions.geojson", "regions.shp", "regions.gpkg"])
def test_file_formats(tmp_path: Path, name: str) -> None:
    assessment = load(tmp_path, file=name)
    write_polygons(tmp_path / name, POLYGONS)
    found = read_regions(assessment)
    assert found.names == list(POLYGONS)
    for shape, expected in zip(found.shapes, POLYGONS.values(), strict=True):
        assert shape.equals_exact(expected, 1e-9, normalize=True)
    assert region_problems(assessment) == []


@pytest.mark.parametrize("crs", [LAEA, 3857, 32632, 4258])
def test_other_reference_systems(tmp_path: Path, crs: object) -> None:
    assessment = rewrite(tmp_path, POLYGONS, crs=crs)
    found = read_regions(assessment)
    for shape, expected in zip(found.shapes, POLYGONS.values(), strict=True):
        # Corners come back; an edge is straight in the file's own system, not in degrees: up to
        # 200 km long here, it leaves the straight line in degrees by hundreds of metres.
        limit = 2e-2 if crs != 4258 else 1e-6
        assert shapely.hausdorff_distance(shape, expected) < limit
        corners = shapely.points(shapely.get_coordinates(expected))
        assert shapely.distance(shape.boundary, corners).max() < 1e-6


def test_edges_of_projected_polygons_stay_straight_there(tmp_path: Path) -> None:
    """A square in an equal-area system keeps its area, to what a sphere differs from WGS 84."""
    metres = LAEA.replace("km", "m")
    square = gpd.GeoSeries([shapely.box(-90e3, -100e3, 90e3, 120e3)], crs=metres)
    frame = gpd.GeoDataFrame({"name": ["Saltmere"]}, geometry=square, crs=metres)
    assessment = load(tmp_path)
    frame.to_file(tmp_path / "regions.gpkg")
    shape = read_regions(assessment).shapes[0]
    back = gpd.GeoSeries([shape], crs=4326).to_crs(metres)
    assert back.area[0] == pytest.approx(180e3 * 220e3, rel=1e-6)
    assert area_km2(sphere_area(shape)) == pytest.approx(180 * 220, rel=5e-3)
    four = shapely.get_coordinates(frame.to_crs(4326).geometry[0])
    assert abs(sphere_area(shapely.Polygon(four)) / sphere_area(shape) - 1) > 1e-4


def test_longitudes_from_0_to_360() -> None:
    shape = within_180(shapely.box(350, 0, 365, 10))
    assert shape.equals(shapely.box(-10, 0, 5, 10))
    far = within_180(shapely.box(170, 0, 200, 10))
    expected = shapely.MultiPolygon([shapely.box(170, 0, 180, 10), shapely.box(-180, 0, -160, 10)])
    assert far.equals(expected)
    whole = within_180(shapely.box(0, -90, 360, 90))
    assert whole.equals(shapely.box(-180, -90, 180, 90))


def test_antimeridian_split_or_not_is_the_same() -> None:
    lat, lon = np.arange(50.0, 60.1, 2.5), np.arange(-180.0, 180.1, 5)
    split = shapely.MultiPolygon([shapely.box(172, 51, 180, 58), shapely.box(-180, 51, -171, 58)])
    jumping = shapely.Polygon([(172, 51), (-171, 51), (-171, 58), (172, 58)])
    beyond = shapely.box(172, 51, 189, 58)
    expected = coverage(split, lat, lon)
    assert expected[:, 0].max() > 0.9
    assert expected[:, -1].max() > 0.9
    assert (expected[:, 2:-2] == 0).all()
    turned, wrapped = unwrap(jumping)
    assert wrapped
    for shape in (within_180(turned), within_180(beyond)):
        np.testing.assert_allclose(coverage(shape, lat, lon), expected, rtol=0, atol=1e-13)
    assert unwrap(split) == (split, False)


def test_a_hole_across_the_antimeridian() -> None:
    outer = [(170, 0), (-170, 0), (-170, 10), (170, 10)]
    hole = [(178, 2), (178, 8), (-178, 8), (-178, 2)]
    turned, wrapped = unwrap(shapely.Polygon(outer, [hole]))
    expected = shapely.Polygon(
        shapely.box(170, 0, 190, 10).exterior, [shapely.box(178, 2, 182, 8).exterior]
    )
    assert wrapped
    assert turned.equals(expected)


def test_a_cap_round_the_pole() -> None:
    lon = np.arange(-170.0, 180, 20)
    cap = shapely.Polygon(np.column_stack([lon, np.full(lon.size, -70.0)]))
    turned, wrapped = unwrap(cap)
    shape = within_180(turned)
    assert wrapped
    assert shape.equals(shapely.box(-180, -90, 180, -70))
    # Drawn out to the pole and back along the antimeridian, as many files have it.
    drawn = shapely.Polygon([(-180, -70), (180, -70), (180, -90), (-180, -90)])
    assert unwrap(drawn) == (drawn, False)


def test_an_edge_taken_the_short_way_is_a_warning(tmp_path: Path) -> None:
    jumping = shapely.Polygon([(172, 44), (-171, 44), (-171, 46), (172, 46)])
    rewrite(tmp_path, POLYGONS | {"Far": jumping})
    assessment = load_assessment(tmp_path / "assessment.yaml", regions=["Saltmere"])
    assert messages(assessment, "error") == []
    first, _ = messages(assessment, "warning")
    assert "region 'Far' has an edge over 180 degrees of longitude long" in first


def test_names_may_be_numbers(tmp_path: Path) -> None:
    assessment = load(tmp_path, name="code")
    frame = gpd.GeoDataFrame({"code": [3, 1, 2]}, geometry=list(POLYGONS.values()), crs=4326)
    frame.to_file(tmp_path / "regions.gpkg", layer="regions")
    assert read_regions(assessment).names == ["3", "1", "2"]


def test_only_some_regions(tmp_path: Path) -> None:
    assessment = load(tmp_path, only=["Brackwater", "Saltmere"])
    assert read_regions(assessment).names == ["Saltmere", "Brackwater"]


def test_a_bad_polygon_that_is_not_wanted_does_not_matter(tmp_path: Path) -> None:
    bow = shapely.Polygon([(5, 44), (6, 45), (6, 44), (5, 45)])
    rewrite(tmp_path, POLYGONS | {"Bow": bow})
    assessment = load_assessment(tmp_path / "assessment.yaml", ["regions.only=[Saltmere]"])
    assert region_problems(assessment) == []


def _without(folder: Path) -> Assessment:
    assessment = load(folder)
    (folder / "regions.gpkg").unlink()
    return assessment


def _text(folder: Path) -> Assessment:
    assessment = load(folder)
    (folder / "regions.gpkg").write_text("no polygons\n")
    return assessment


def _layers(folder: Path) -> Assessment:
    write_assessment(folder)
    write_polygons(folder / "regions.gpkg", POLYGONS, layer="more")
    return load_assessment(folder / "assessment.yaml")


def _no_crs(folder: Path) -> Assessment:
    assessment = load(folder, file="bare.gpkg")
    frame = gpd.GeoDataFrame({"name": ["a"]}, geometry=[shapely.box(5, 44, 6, 45)])
    with pytest.warns(UserWarning, match="crs"):
        frame.to_file(folder / "bare.gpkg")
    return assessment


def _table(folder: Path) -> Assessment:
    assessment = load(folder, file="table.csv")
    pd.DataFrame({"name": ["a", "b"]}).to_csv(folder / "table.csv", index=False)
    return assessment


def _geojson(folder: Path, *features: tuple[object, object]) -> Assessment:
    content = {
        "type": "FeatureCollection",
        "features": [
            {"type": "Feature", "properties": {"name": name}, "geometry": geometry}
            for name, geometry in features
        ],
    }
    (folder / "given.geojson").write_text(json.dumps(content))
    return load(folder, file="given.geojson")


SQUARE = {"type": "Polygon", "coordinates": [[[5, 44], [6, 44], [6, 45], [5, 45], [5, 44]]]}
BOW = {"type": "Polygon", "coordinates": [[[5, 44], [6, 45], [6, 44], [5, 45], [5, 44]]]}
SWAPPED = {"type": "Polygon", "coordinates": [[[44, 95], [45, 95], [45, 96], [44, 96], [44, 95]]]}
LINE = {"type": "LineString", "coordinates": [[5, 44], [6, 45]]}
BAD: dict[str, tuple[Callable[[Path], Assessment], str]] = {
    "no file": (_without, r"regions\.gpkg: no such file; regions\.file must be polygons"),
    "not polygons": (_text, r"regions\.gpkg: region polygons cannot be read \("),
    "table": (_table, r"table\.csv: holds no polygon"),
    "several layers": (
        _layers,
        r"regions\.gpkg: has the layers regions, more; name one in regions\.layer",
    ),
    "no such layer": (
        lambda f: load(f, layer="districts"),
        r"has no layer 'districts' \(regions\.layer\); it has regions",
    ),
    "no such attribute": (
        lambda f: load(f, name="district"),
        r"has no attribute 'district' \(regions\.name\); it has name",
    ),
    "no reference system": (_no_crs, r"bare\.gpkg: has no coordinate reference system; set one"),
    "no features": (lambda f: _geojson(f), r"given\.geojson: "),
    "no name": (
        lambda f: _geojson(f, (None, SQUARE), ("b", SQUARE)),
        r"1 of 2 polygons have no 'name'; name every one",
    ),
    "name twice": (
        lambda f: _geojson(f, ("a", SQUARE), ("a", SQUARE)),
        r"region 'a' stands twice in 'name'; dissolve its polygons into one",
    ),
    "reserved name": (
        lambda f: _geojson(f, (OUTSIDE, SQUARE)),
        r"a region is named 'outside all regions', which stands for the rest; rename it",
    ),
    "no polygon": (
        lambda f: _geojson(f, ("a", SQUARE), ("b", None)),
        r"region 'b' has no polygon; give it one, or remove it",
    ),
    "line": (
        lambda f: _geojson(f, ("a", LINE)),
        r"region 'a' is a LineString; a region must be a Polygon or MultiPolygon",
    ),
    "invalid": (
        lambda f: _geojson(f, ("a", SQUARE), ("b", BOW)),
        r"region 'b' is not a valid polygon \(Self-intersection.*\); repair it in a GIS program",
    ),
    "axes swapped": (
        lambda f: _geojson(f, ("a", SWAPPED)),
        r"region 'a' reaches latitude 96; is the order of axes right\?",
    ),
    "unknown only": (
        lambda f: load(f, only=["Saltmere", "Nowhere"]),
        r"regions\.only: no region 'Nowhere'; there are Saltmere, Thornfold, Brackwater",
    ),
    "empty only": (lambda f: load(f, only=[]), r"regions\.only: is empty; name the regions"),
    "unknown subset": (
        lambda f: load(f, "Nowhere"),
        r"--region: no region 'Nowhere'; there are Saltmere, Thornfold, Brackwater",
    ),
    "subset that is not kept": (
        lambda f: load(f, "Thornfold", only=["Saltmere"]),
        r"--region: no region 'Thornfold'; there are Saltmere$",
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_polygons_are_one_line_each(tmp_path: Path, case: str) -> None:
    make, pattern = BAD[case]
    assessment = make(tmp_path)
    with pytest.raises(InputError, match=pattern) as caught:
        read_regions(assessment)
    assert str(caught.value).count("\n") == 0
    assert str(assessment.path(assessment.regions.file)) in str(caught.value)
    assert messages(assessment, "error") == [str(caught.value)]


def test_every_fault_is_listed(tmp_path: Path) -> None:
    assessment = _geojson(tmp_path, ("a", BOW), ("b", None), ("c", SQUARE), ("d", LINE))
    with pytest.raises(InputError) as caught:
        read_regions(assessment)
    assert [line.split("region ")[1][:3] for line in str(caught.value).splitlines()] == [
        "'a'",
        "'b'",
        "'d'",
    ]


def test_overlaps_and_what_lies_off_the_grid_are_warnings(tmp_path: Path) -> None:
    more = {
        "Hill": shapely.box(5.5, 45, 6, 45.5),
        "Coast": shapely.box(8.8, 45, 9.2, 46),
        "Isle": shapely.box(12, 45, 13, 46),
    }
    rewrite(tmp_path, POLYGONS | more)
    assessment = load_assessment(tmp_path / "assessment.yaml", regions=["Hill"])
    assert messages(assessment, "error") == []
    path = str(tmp_path / "regions.gpkg")
    area = area_km2(sphere_area(more["Hill"]))
    assert messages(assessment, "warning") == [
        f"{path}: regions 'Saltmere' and 'Hill' overlap by {area:,.3g} km2; "
        "what lies there counts in both",
        f"{path}: 50 % of region 'Coast' lies off the analysis grid and is left out",
        f"{path}: region 'Isle' lies off the analysis grid; "
        "extend grid, or leave it out with regions.only",
    ]


@pytest.mark.parametrize("subset", [[], ["Isle"]])
def test_a_region_asked_for_off_the_grid_is_an_error(tmp_path: Path, subset: list[str]) -> None:
    rewrite(tmp_path, POLYGONS | {"Isle": shapely.box(12, 45, 13, 46)})
    assessment = load_assessment(tmp_path / "assessment.yaml", regions=subset)
    (text,) = messages(assessment, "error")
    assert "region 'Isle' lies off the analysis grid; extend grid, or leave it out" in text
    if subset:
        with pytest.raises(InputError, match="region 'Isle' does not touch the analysis grid"):
            run_grid(assessment)
