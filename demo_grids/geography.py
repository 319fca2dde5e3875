"""Districts, crop areas, calendars and baseline yields of the invented federation of Hollin.

Every shape is a function of the position in the world (0..1 from west to east and from south to
north), so that a world of any size has the same map.
"""

from __future__ import annotations

from dataclasses import dataclass

import geopandas as gpd
import numpy as np
import shapely
from shapely.ops import polygonize, unary_union

from demo_grids.domain import CENTRE_LAT, CENTRE_LON, Domain

DISTRICTS = {
    "Upper Hollin": (0.20, 0.75),
    "Thornfold": (0.50, 0.75),
    "Eastmoor": (0.80, 0.75),
    "Saltmere": (0.20, 0.25),
    "Brackwater": (0.50, 0.25),
    "Lowsend": (0.80, 0.25),
}
CRS = (
    f"+proj=laea +lat_0={CENTRE_LAT} +lon_0={CENTRE_LON} +x_0=0 +y_0=0 +datum=WGS84 "
    "+units=m +no_defs"
)
LAKE = (0.17, 0.22, 0.045)
ENCLAVE = (0.80, 0.30, 0.060)
BARREN = ((0.02, 1.0, 0.34, 0.36), (1.0, 1.0, 0.24, 0.22), (1.02, 0.0, 0.14, 0.24))


def district_shapes() -> dict[str, shapely.Geometry]:
    """Return the districts in world positions: shared wavy borders, a lake, and an enclave.

    The lake is a hole in Saltmere that belongs to nobody; the enclave is a part of Brackwater
    inside Lowsend.
    """
    along = np.linspace(-0.05, 1.05, 221)
    ring = np.linspace(0, 2 * np.pi, 240, endpoint=False)
    stretch = 1 / np.maximum(np.abs(np.cos(ring)), np.abs(np.sin(ring))) ** 0.85
    radius = 0.44 * stretch * (1 + 0.035 * np.sin(5 * ring) + 0.02 * np.sin(11 * ring + 1))
    outline = shapely.Polygon(
        np.stack([0.5 + radius * np.cos(ring), 0.5 + radius * np.sin(ring)], axis=1)
    )
    waves = [
        np.stack([0.36 + 0.03 * np.sin(9 * along), along], axis=1),
        np.stack([0.65 + 0.03 * np.sin(7 * along + 2), along], axis=1),
        np.stack([along, 0.52 + 0.04 * np.sin(8 * along + 1)], axis=1),
    ]
    lines = unary_union([outline.exterior, *(shapely.LineString(wave) for wave in waves)])
    parts = [part for part in polygonize(lines) if outline.contains(part.representative_point())]
    districts = {
        name: next(part for part in parts if part.contains(shapely.Point(seed)))
        for name, seed in DISTRICTS.items()
    }
    lake, enclave = (shapely.Point(x, y).buffer(r, quad_segs=12) for x, y, r in (LAKE, ENCLAVE))
    districts["Saltmere"] = districts["Saltmere"].difference(lake)
    districts["Lowsend"] = districts["Lowsend"].difference(enclave)
    districts["Brackwater"] = shapely.MultiPolygon([districts["Brackwater"], enclave])
    return districts


def districts(domain: Domain) -> gpd.GeoDataFrame:
    """Return the districts as polygons in longitude and latitude (EPSG:4326)."""
    scale = np.array([domain.width, domain.height])
    corner = np.array([domain.west, domain.south])
    shapes = {
        name: shapely.transform(shape, lambda points: points * scale + corner)
        for name, shape in district_shapes().items()
    }
    return gpd.GeoDataFrame(
        {"name": list(shapes), "federation": "Hollin"},
        geometry=list(shapes.values()),
        crs="EPSG:4326",
    )


@dataclass(frozen=True)
class CropLayer:
    """One crop under one water supply.

    Attributes
    ----------
    area_step
        Step of its area layer in parts of a pixel: 0.25 is a quarter of a pixel wide.
    geotiff
        Area in hectares as GeoTIFF; otherwise a fraction of the cell as NetCDF.
    yield_units
        Unit its baseline yield is written in.
    phases
        Growth phases as fractions of the season.
    """

    crop: str
    system: str
    area_step: float
    geotiff: bool
    yield_units: str
    phases: dict[str, tuple[float, float]]

    @property
    def name(self) -> str:
        """``<crop>_<system>``."""
        return f"{self.crop}_{self.system}"


LAYERS = (
    CropLayer("maize", "rainfed", 0.25, True, "t ha-1", {"flowering": (0.45, 0.65)}),
    CropLayer("maize", "irrigated", 0.5, False, "t ha-1", {"flowering": (0.45, 0.65)}),
    CropLayer("barley", "rainfed", 2.0, False, "kg ha-1", {"filling": (0.75, 1.0)}),
    CropLayer(
        "rice",
        "irrigated",
        0.4,
        False,
        "t ha-1",
        {"vegetative": (0.0, 0.45), "reproductive": (0.45, 0.7), "ripening": (0.7, 1.0)},
    ),
)


def area_share(name: str, u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Return the harvested share of the land at world positions, 0 to 1; invented.

    Hills, moors and a band along the western edge bear nothing, rice keeps to the southern
    river, and some fields lie beyond every district.
    """
    texture = 0.85 + 0.15 * np.sin(23 * u + 1) * np.sin(19 * v + 2)
    barren = (u < 0.04) | ((v < 0.09) & (u < 0.35))
    for east, north, width, height in BARREN:
        barren |= np.hypot((u - east) / width, (v - north) / height) < 1
    match name:
        case "maize_rainfed":
            share = 0.16 * np.exp(-(((u - 0.65) / 0.45) ** 2) - ((v - 0.5) / 0.45) ** 2)
        case "maize_irrigated":
            share = 0.10 * np.exp(-(((u - 0.15) / 0.22) ** 2) - ((v - 0.35) / 0.2) ** 2)
            share += 0.08 * np.exp(-(((u - 0.8) / 0.2) ** 2) - ((v - 0.25) / 0.2) ** 2)
        case "barley_rainfed":
            share = 0.20 * np.exp(-(((u - 0.45) / 0.5) ** 2) - ((v - 0.7) / 0.4) ** 2)
        case "rice_irrigated":
            river = 0.22 + 0.05 * np.sin(7 * u)
            share = 0.12 * np.exp(-(((v - river) / 0.13) ** 2)) * (u > 0.1) * (u < 0.97)
            share = share * (v > 0.05)
        case _:
            raise ValueError(f"no crop layer {name!r}")
    share = np.where(barren | (u < 0) | (u > 1) | (v < 0) | (v > 1), 0.0, share * texture)
    return np.where(share < 0.02, 0.0, share)


def season_days(name: str, u: np.ndarray, v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return planting and maturity, day of the year from 1, whole numbers; invented.

    Barley is sown in autumn and matures in the next year.
    """
    planting, length = {
        "maize_rainfed": (118 + 18 * (v - 0.5), 138 + 10 * (v - 0.5)),
        "maize_irrigated": (112 + 18 * (v - 0.5), 146 + 10 * (v - 0.5)),
        "barley_rainfed": (288 - 16 * (v - 0.5), 252 + 18 * (v - 0.5)),
        "rice_irrigated": (130 + 14 * (v - 0.5) - 4 * u, 126 + 8 * (v - 0.5) + 4 * u),
    }[name]
    first = np.round(planting + 0 * u)
    last = np.round(planting + length + 0 * u)
    return first, np.where(last > 365, last - 365, last)


def baseline_yield(name: str, u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Return the mean yield of the baseline, t/ha; invented."""
    base, east, north = {
        "maize_rainfed": (5.6, 0.6, 0.9),
        "maize_irrigated": (9.4, -0.5, 0.4),
        "barley_rainfed": (4.3, -0.4, 0.8),
        "rice_irrigated": (6.4, 0.5, -0.6),
    }[name]
    wave = 0.05 * np.sin(11 * u + 3 * v)
    return base * (1 + wave) + east * (u - 0.5) + north * (v - 0.5)
