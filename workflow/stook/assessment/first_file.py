"""The text of a first assessment file, with a comment and a blank for all that is not known."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

from stook.assessment.discover import FILE_NAME, Discovered, FoundResponse, FoundRun
from stook.errors import StookError
from stook.grids.axes import SourceAxis, source_axes
from stook.grids.cf import open_undecoded

BASELINE_YEARS = 30
"""Length of a climate normal (World Meteorological Organization; from memory)."""

HORIZON_YEARS = 20
"""Length of a horizon (common practice in assessments of climate change, no source)."""

_PLAIN = re.compile(r"[A-Za-z][A-Za-z0-9_./-]*")

_RESPONSE_HINT = """\
# A crop needs harvested area, planting and maturity (day of year), a baseline yield and a response
# document (docs/yields.md). A layer is a NetCDF or GeoTIFF file, {{file: ..., variable: ...}}, or
# one number for everywhere, {{value: 3.2, unit: t ha-1}}.
"""


def assessment_text(folder: str, found: Discovered) -> str:
    """Return the text of an assessment file from what a folder holds.

    Parameters
    ----------
    folder
        Name of the folder, which names the assessment.
    found
        What it holds.
    """
    name = re.sub(r"[^A-Za-z0-9.-]+", "-", folder).strip("-.") or "assessment"
    parts = [
        "# A first assessment file, from the files of this folder. Fill in what is marked FILL IN,",
        "# then run `stook check` on it. Every key: docs/assessment-file.md. Paths are relative to",
        "# this file.",
        "",
        "title:                       # FILL IN: one line that says what is assessed",
        f"name: {name}",
        "seed: 1                      # the same seed gives the same results",
        "results: results",
        "",
        *_grid(found),
        "",
        *_periods(found),
        "",
        *_reference(found),
        "",
        *_simulations(found),
        "",
        *_crops(found),
        "",
        *_regions(found),
    ]
    return "\n".join(parts) + "\n"


def _grid(found: Discovered) -> list[str]:
    lines = ["grid:                        # the analysis grid: pixel centres, degrees"]
    axes = _axes(found.grid_file) if found.grid_file else None
    if axes is None:
        return [
            *lines,
            "  # such as {first: 39.75, last: 41.25, step: 0.5}",
            "  lat:                       # FILL IN",
            "  lon:                       # FILL IN",
        ]
    assert found.grid_file is not None
    lines.append(f"  # the grid of {found.grid_file.name}; narrow it to the region you assess")
    return lines + [f"  {key}: {axis}" for key, axis in zip(("lat", "lon"), axes, strict=True)]


def _axes(path: Path) -> tuple[str, str] | None:
    """Return the axes of a file as the assessment takes them; None if they are not regular."""
    try:
        with open_undecoded(path) as dataset:
            lat, lon, _, _ = source_axes(dataset, path)
    except StookError:
        return None
    texts = (_axis(lat, 90.0), _axis(lon, 180.0))
    return (texts[0], texts[1]) if texts[0] and texts[1] else None


def _axis(axis: SourceAxis, limit: float) -> str | None:
    centres = axis.centres
    if limit == 180.0:
        centres = np.sort((centres + 180.0) % 360.0 - 180.0)
    if len(centres) < 2:
        return None
    step = round(float(centres[-1] - centres[0]) / (len(centres) - 1), 6)
    first = round(float(centres[0]), 6)
    last = round(first + step * (len(centres) - 1), 6)
    regular = np.allclose(np.diff(centres), step, atol=1e-3 * step)
    inside = first - step / 2 >= -limit - 1e-6 and last + step / 2 <= limit + 1e-6
    return f"{{first: {first:g}, last: {last:g}, step: {step:g}}}" if regular and inside else None


def _periods(found: Discovered) -> list[str]:
    lines = ["periods:                     # first and last year, both included"]
    firsts = [min(run.years) for run in _joined(found) if run.years]
    lasts = [max(run.years) for run in _joined(found) if run.years]
    if found.reference_years:
        firsts.append(min(found.reference_years))
    ends = [*lasts, *([max(found.reference_years)] if found.reference_years else [])]
    first, last = max(firsts, default=0), min(ends, default=-1)
    if first <= last:
        first = max(first, last - BASELINE_YEARS + 1)
        lines.append(f"  baseline: [{first}, {last}]     # years that all series have")
    else:
        lines.append("  baseline:                  # FILL IN: such as [1991, 2020]")
    if lasts and min(lasts) - HORIZON_YEARS + 1 > last:
        end = min(lasts)
        lines += ["  horizons:", f"    end: [{end - HORIZON_YEARS + 1}, {end}]"]
    else:
        lines.append("  horizons: {}               # such as {mid-century: [2041, 2060]}")
    return lines


def _reference(found: Discovered) -> list[str]:
    head = "the observed record that models are corrected with"
    if not found.reference:
        if not found.runs:
            return [f"# {head}:", "reference:                   # FILL IN"]
        return [
            f"# No {head.removeprefix('the ')} was found. Give one, such as",
            "# reference:",
            "#   name: ...",
            "#   files: {tasmin: [reference/tasmin_*.nc], tasmax: [reference/tasmax_*.nc]}",
            "# or correct nothing:",
            "correct:",
            "  all: {method: none}",
        ]
    lines = [f"reference:                   # {head}", "  name: reference", "  files:"]
    for variable, names in found.reference.items():
        lines.append(f"    {variable}: [{_quoted(_pattern(names))}]")
    return lines


def _pattern(names: list[str]) -> str:
    """Return one name, or a pattern that fits all."""
    if len(names) == 1:
        return names[0]
    head = _shared_start(names)
    tail = _shared_start([name[len(head) :][::-1] for name in names])[::-1]
    return f"{head}*{tail}"


def _shared_start(names: list[str]) -> str:
    same = [len(set(letters)) == 1 for letters in zip(*names, strict=False)]
    return names[0][: same.index(False) if False in same else len(same)]


def _simulations(found: Discovered) -> list[str]:
    runs = _joined(found)
    if not runs:
        return ["# simulations: none was found; see docs/assessment-file.md"]
    historical = _historical(found.runs)
    patterns = {_run_pattern(name, run) for run in found.runs for name in _names(run)}
    if found.named and len(patterns) == 1:
        lines = [
            "simulations:                 # every file that fits the pattern",
            f"  pattern: {_quoted(patterns.pop())}",
        ]
        if historical:
            lines.append(f"  historical: {historical}     # joined before every scenario")
        return lines
    lines = ["simulations:", "  runs:"]
    for run in runs:
        lines += [
            f"    - model: {_quoted(run.model)}",
            f"      scenario: {_quoted(run.scenario)}",
            f"      realisation: {_quoted(run.realisation)}",
            "      files:",
        ]
        for variable, names in sorted(run.files.items()):
            lines.append(f"        {variable}: [{', '.join(map(_quoted, names))}]")
    return lines


def _names(run: FoundRun) -> list[str]:
    return [name for names in run.files.values() for name in names]


def _run_pattern(name: str, run: FoundRun) -> str:
    """Return a file's path with its fields in braces."""
    match = FILE_NAME.fullmatch(name.rpartition("/")[2])
    if match is None:
        return name
    fields = {
        match["variable"]: "{variable}",
        run.model: "{model}",
        run.scenario: "{scenario}",
        run.realisation: "{realisation}",
    }
    folders = [fields.get(part, part) for part in name.split("/")[:-1]]
    file = f"{{variable}}_{match['table']}_{{model}}_{{scenario}}_{{realisation}}"
    tail = "_*.nc" if match["grid"] or match["first"] else ".nc"
    return "/".join([*folders, file + tail])


def _historical(runs: list[FoundRun]) -> str | None:
    """Return the scenario name of the historical part, if there are others to join it to."""
    names = {run.scenario for run in runs}
    past = [name for name in names if name.lower().startswith("hist")]
    return past[0] if len(past) == 1 and len(names) > 1 else None


def _joined(found: Discovered) -> list[FoundRun]:
    """Return the runs, each with the files and years of its historical part."""
    historical = _historical(found.runs)
    past = {(r.model, r.realisation): r for r in found.runs if r.scenario == historical}
    joined = []
    for run in found.runs:
        if run.scenario == historical:
            continue
        before = past.get((run.model, run.realisation), FoundRun("", "", ""))
        files = {v: before.files.get(v, []) + names for v, names in run.files.items()}
        years = [*before.years, *run.years]
        joined.append(FoundRun(run.model, run.scenario, run.realisation, files, years))
    return joined


def _crops(found: Discovered) -> list[str]:
    lines = _RESPONSE_HINT.format().splitlines()
    lines += [f"# Found: {name}" for name in found.layers]
    lines.append("crops:")
    crops: dict[str, list[FoundResponse]] = {}
    for response in found.responses or [FoundResponse("", "crop-name", "rainfed", ())]:
        crops.setdefault(response.crop, []).append(response)
    for crop, systems in crops.items():
        comment = (
            "" if found.responses else "     # FILL IN the name of the crop and its water system"
        )
        lines += [f"  {_quoted(crop)}:{comment}", "    systems:"]
        for one in systems:
            lines += _system(one)
    return lines


def _system(one: FoundResponse) -> list[str]:
    lines = [
        f"      {_quoted(one.system)}:",
        "        area:                # FILL IN: ha, km2, or share of the cell",
        "        calendar:",
        "          planting:          # FILL IN: day of year",
        "          maturity:          # FILL IN: day of year",
    ]
    if one.phases:
        lines.append("        phases:              # fractions of the season, such as [0.4, 0.6]")
        lines += [f"          {phase + ':':<19}# FILL IN" for phase in one.phases]
    lines.append("        baseline_yield:      # FILL IN: t ha-1")
    file = f" {_quoted(one.file)}" if one.file else "            # FILL IN: response.yaml"
    return [*lines, f"        response:{file}"]


def _regions(found: Discovered) -> list[str]:
    lines = ["regions:"]
    if len(found.polygons) != 1:
        lines += [f"  # Found: {polygons.file}" for polygons in found.polygons]
        lines.append("  file:                      # FILL IN: GeoPackage, GeoJSON or shapefile")
        hint = "the attribute that holds a region's name"
    else:
        only = found.polygons[0]
        lines.append(f"  file: {_quoted(only.file)}")
        hint = f"the attribute that holds a region's name: {', '.join(only.attributes)}"
    return [*lines, f"  name:                      # FILL IN: {hint}"]


def _quoted(text: str) -> str:
    """Return a text as YAML takes it, in quotes where it could be read as something else."""
    words = ("null", "true", "false", "yes", "no", "on", "off", "y", "n")
    plain = _PLAIN.fullmatch(text) and text.lower() not in words
    escaped = text.replace("'", "''")
    return text if plain else f"'{escaped}'"
