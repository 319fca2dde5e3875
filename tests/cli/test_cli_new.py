"""A first assessment file from the files of a folder."""

from __future__ import annotations

import sys

import pytest
import yaml
from stook import cli
from stook.assessment.check import check
from stook.assessment.discover import FILE_NAME
from stook.assessment.load import load_assessment
from stook.assessment.new import write_first_assessment
from stook.errors import AssessmentError


def fill_in(text, given):
    """Fill the blanks of a first file with what the complete file of the same world says."""
    content = yaml.safe_load(text)
    blanks = text.count("FILL IN") - 1  # the head of the file speaks of the mark
    content["title"] = given["title"]
    content["regions"]["name"] = "name"
    for crop, spec in content["crops"].items():
        for system, own in spec["systems"].items():
            known = given["crops"][crop]["systems"][system]
            own |= {key: known[key] for key in ("area", "calendar", "baseline_yield")}
            own |= {"phases": known["phases"]} if "phases" in own else {}
    return content, blanks


def test_first_file_loads_and_checks_once_blanks_are_filled(case):
    given = yaml.safe_load(case.file.read_text(encoding="utf-8"))
    case.file.unlink()
    path, seen = write_first_assessment(case.folder)
    text = path.read_text(encoding="utf-8")
    assert "simulation SEDGE-LR high r1i1p1f1: hurs, pr, tasmax, tasmin" in seen
    assert "polygons: districts.gpkg" in seen
    with pytest.raises(AssessmentError, match="title: is blank; fill it in") as caught:
        load_assessment(path)
    content, blanks = fill_in(text, given)
    assert len(str(caught.value).splitlines()) == blanks
    path.write_text(yaml.safe_dump(content), encoding="utf-8")
    filled = load_assessment(path, ["simulations.models=[SEDGE-LR]"])
    assert filled.simulations.pattern == given["simulations"]["pattern"]
    assert filled.periods.baseline == tuple(given["periods"]["baseline"])
    assert content["grid"] == {key: given["grid"][key] for key in ("lat", "lon")}
    found = check(filled)
    assert found.problems == []
    assert [s.name for s in found.simulations] == ["observed", "SEDGE-LR_high_r1i1p1f1"]


def test_files_without_a_telling_name_are_known_by_their_attributes(case):
    case.file.unlink()
    for number, path in enumerate(sorted(case.folder.glob("climate/SEDGE-LR/*.nc"))):
        path.rename(path.with_name(f"grid{number:02d}.nc"))
    for path in case.folder.glob("climate/ALDER-ESM/*.nc"):
        path.unlink()
    path, _ = write_first_assessment(case.folder)
    content = yaml.safe_load(path.read_text(encoding="utf-8"))
    (run,) = content["simulations"]["runs"]
    assert (run["model"], run["scenario"], run["realisation"]) == ("SEDGE-LR", "high", "r1i1p1f1")
    assert {variable: len(names) for variable, names in run["files"].items()} == {
        variable: 3 for variable in ("hurs", "pr", "tasmax", "tasmin")
    }  # two historical files come before that of the scenario


def test_nothing_is_overwritten(case, capsys, monkeypatch):
    before = case.file.read_bytes()
    monkeypatch.setattr(sys, "argv", ["stook", "new", str(case.folder)])
    with pytest.raises(SystemExit) as end:
        cli.main()
    assert end.value.code == 1
    assert capsys.readouterr().err == (
        f"error: {case.file}: is there already; nothing is overwritten\n"
    )
    assert case.file.read_bytes() == before


def test_folder_without_files(tmp_path):
    path, seen = write_first_assessment(tmp_path)
    assert seen == ["no climate file found"]
    with pytest.raises(AssessmentError, match=r"grid\.lat: is blank|grid: give either"):
        load_assessment(path)


def test_folder_that_is_not_there(tmp_path):
    with pytest.raises(AssessmentError, match="no such folder"):
        write_first_assessment(tmp_path / "nowhere")


@pytest.mark.parametrize(
    ("name", "fields"),
    [
        # CMIP6 Global Attributes, DRS and File Names (the form of facts in docs/prepare.md).
        (
            "tasmin_day_UKESM1-0-LL_ssp370_r1i1p1f2_gn_20150101-20491230.nc",
            ("tasmin", "UKESM1-0-LL", "ssp370", "r1i1p1f2", "2015", "2049"),
        ),
        (
            "pr_day_MODEL_rcp85_r1i1p1_20060101-20101231.nc",
            ("pr", "MODEL", "rcp85", "r1i1p1", "2006", "2010"),
        ),
        ("tas_Amon_MODEL_historical_r1_gn.nc", ("tas", "MODEL", "historical", "r1", None, None)),
        ("tas_day_RECORD_1991-2010.nc", None),
    ],
)
def test_file_names(name, fields):
    match = FILE_NAME.fullmatch(name)
    wanted = ("variable", "model", "scenario", "realisation", "first", "last")
    assert (match and tuple(match[key] for key in wanted)) == fields
