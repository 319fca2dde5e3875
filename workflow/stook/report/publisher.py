"""Writing the files of the report: each through a job of the ledger, each listed on the page."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path

import geopandas as gpd
import pandas as pd
import xarray as xr

from stook.assessment.layout import Layout
from stook.assessment.schema import Assessment
from stook.audit.ledger import Job, forget, ledger_table
from stook.grids.files import write_table
from stook.report.geo import bands, for_exchange
from stook.report.page import Entry, Picture
from stook.report.style import Drawing

RULE = "report_page"


class Publisher:
    """Writes files into the report folder and remembers them for the list on the page.

    Attributes
    ----------
    files
        What was written, by heading.
    paths
        Every file of this run.
    """

    def __init__(self, assessment: Assessment) -> None:
        self.assessment = assessment
        self.layout = Layout.of(assessment)
        self.folder = self.layout.report
        self.files: dict[str, list[Entry]] = {}
        self.paths: list[Path] = []

    def table(
        self, name: str, frame: pd.DataFrame, parents: Sequence[Path], description: str
    ) -> None:
        """Write a table as CSV and as Parquet."""
        with self._job(parents) as job:
            for suffix in ("csv", "parquet"):
                path = self.folder / "tables" / f"{name}.{suffix}"
                job.table(frame, path)
                self._list("Tables", path, description if suffix == "csv" else "the same")

    def drawing(self, drawing: Drawing, parents: Sequence[Path]) -> Picture:
        """Write a figure as PNG with the numbers behind it as CSV; return it for the page."""
        png = drawing.png()
        with self._job(parents) as job:
            path = self.folder / "figures" / f"{drawing.name}.png"
            job.claim(path).write_bytes(png)
            numbers = path.with_suffix(".csv")
            job.table(drawing.data, numbers)
        self._list("Figures", path, "")
        self._list("Figures", numbers, "the numbers behind it")
        return Picture.of(drawing, png)

    def grids(
        self,
        name: str,
        dataset: xr.Dataset,
        rasters: Mapping[str, Sequence[str]],
        dimension: str,
        parents: Sequence[Path],
        title: str,
    ) -> None:
        """Write a pixel summary as CF NetCDF, and each step of a dimension as a GeoTIFF.

        Parameters
        ----------
        rasters
            By value of the dimension, the variables that become its bands.
        """
        folder = self.folder / "maps"
        with self._job(parents) as job:
            whole = folder / f"{name}.nc"
            job.netcdf(for_exchange(dataset), whole, title)
            self._list("Maps", whole, title)
            for step, names in rasters.items():
                path = folder / f"{name}_{step}.tif"
                stack = bands(dataset.sel({dimension: step}), names)
                stack.rio.to_raster(job.claim(path), driver="GTiff", compress="deflate")
                self._list("Maps", path, f"bands {', '.join(names)}")

    def geopackage(self, layers: Mapping[str, gpd.GeoDataFrame], parents: Sequence[Path]) -> None:
        """Write region polygons with their values, one layer after the other."""
        path = self.folder / "regions.gpkg"
        with self._job(parents) as job, tempfile.TemporaryDirectory() as folder:
            # the driver insists on its own suffix, so the file moves to its temporary name after
            made = Path(folder) / path.name
            for name, layer in layers.items():
                layer.to_file(made, layer=name, driver="GPKG", engine="pyogrio")
            job.claim(path).write_bytes(made.read_bytes())
        self._list("Maps", path, "region polygons with the changes, a layer each")

    def page(self, text: str) -> None:
        """Write the page, whose parents are all files of the report before it."""
        path = self.layout.report_page
        with self._job(list(self.paths)) as job:
            job.claim(path).write_text(text, encoding="utf-8")
        self.paths.append(path)

    def ledger(self) -> None:
        """Delete what an earlier run left in the report folder, and write the ledger as a table."""
        path = self.folder / "ledger.csv"
        current = {p.relative_to(self.layout.root).as_posix() for p in (*self.paths, path)}
        table = ledger_table(self.layout.root)
        old = table.loc[(table["rule"] == RULE) & ~table["path"].isin(current), "path"].unique()
        for name in old:
            forget(self.layout.root, self.layout.root / name)
        own = path.relative_to(self.layout.root).as_posix()
        table = table[~table["path"].isin([*old, own])]
        with self._job([self.layout.report_page]) as job:
            write_table(table, job.claim(path))
        self.paths.append(path)

    def _job(self, parents: Sequence[Path]) -> Job:
        return Job(self.assessment, RULE, parents)

    def _list(self, heading: str, path: Path, description: str) -> None:
        entry = Entry(path.relative_to(self.folder).as_posix(), description)
        self.files.setdefault(heading, []).append(entry)
        self.paths.append(path)
