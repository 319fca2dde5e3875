"""Copies of the invented world with one thing altered, and the command line run on them."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import netCDF4
import xarray as xr
from stook import cli

ONE_SIMULATION = ("simulations.models=[SEDGE-LR]", "simulations.scenarios=[high]")


def linked_copy(source: Path, target: Path) -> Path:
    """Return a copy of a folder whose files are links; the assessment file is a copy."""
    for path in sorted(source.rglob("*")):
        place = target / path.relative_to(source)
        if path.is_dir():
            place.mkdir(parents=True)
        elif path.suffix == ".yaml":
            place.parent.mkdir(parents=True, exist_ok=True)
            shutil.copy(path, place)
        else:
            place.symlink_to(path)
    return target / "assessment.yaml"


@dataclass
class Case:
    """One altered world."""

    file: Path

    @property
    def folder(self) -> Path:
        """Where the world is."""
        return self.file.parent

    def own(self, name: str) -> Path:
        """Return a file of this copy that may be altered."""
        path = self.folder / name
        if path.is_symlink():
            original = path.resolve()
            path.unlink()
            shutil.copy(original, path)
        return path

    def names(self, pattern: str) -> list[str]:
        """Return the names of the files of a pattern."""
        paths = sorted(self.folder.glob(pattern))
        return [path.relative_to(self.folder).as_posix() for path in paths]

    def attribute(self, name: str, variable: str, key: str, value: str) -> Path:
        """Set an attribute in a NetCDF file and return the file."""
        path = self.own(name)
        with netCDF4.Dataset(path, "a") as dataset:
            dataset[variable].setncattr(key, value)
        return path

    def rewritten(self, name: str, change) -> Path:
        """Replace a NetCDF file by what a function makes of its dataset."""
        path = self.own(name)
        with xr.open_dataset(path, decode_times=False) as dataset:
            changed = change(dataset).load()
        changed.to_netcdf(path)
        return path

    def text(self, name: str, old: str, new: str) -> Path:
        """Replace a passage that stands once in a text file."""
        path = self.folder / name
        content = path.read_text(encoding="utf-8")
        assert content.count(old) == 1
        path.write_text(content.replace(old, new), encoding="utf-8")
        return path

    def listing(self) -> list[str]:
        """Return every file and folder of the world."""
        return sorted(path.as_posix() for path in self.folder.rglob("*"))

    def process(self, command: str, *arguments: str, **environment: str) -> tuple[int, str, str]:
        """Run the command line in a process of its own; return exit status, output and errors."""
        overrides = [text for setting in ONE_SIMULATION for text in ("--set", setting)]
        done = subprocess.run(
            [sys.executable, "-m", "stook.cli", command, str(self.file), *overrides, *arguments],
            capture_output=True,
            text=True,
            env=os.environ | environment,
            check=False,
        )
        return done.returncode, done.stdout, done.stderr

    def stook(self, command: str, *arguments: str, monkeypatch) -> int:
        """Run the command line on the assessment in this process; return its exit status."""
        overrides = [text for setting in ONE_SIMULATION for text in ("--set", setting)]
        argv = ["stook", command, str(self.file), *overrides, *arguments]
        monkeypatch.setattr(sys, "argv", argv)
        try:
            cli.main()
        except SystemExit as end:
            return int(end.code or 0)
        return 0
