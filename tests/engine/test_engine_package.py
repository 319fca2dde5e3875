"""What is installed: every package folder, the Snakefile and the rules."""

from __future__ import annotations

import tomllib
from pathlib import Path

from stook.engine.fingerprints import RULES
from stook.engine.run import snakefile

ROOT = Path(__file__).parents[2]
SETTINGS = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"][
    "setuptools"
]


def test_every_package_folder_is_listed():
    folders = {"stook.pipeline"}
    for top, name in ((ROOT / "workflow" / "stook", "stook"), (ROOT / "demo_grids", "demo_grids")):
        for path in top.rglob("__init__.py"):
            folders.add(".".join((name, *path.parent.relative_to(top).parts)))
    assert set(SETTINGS["packages"]) == folders


def test_every_other_file_travels():
    files = {
        path.relative_to(ROOT / "workflow" / "stook")
        for path in (ROOT / "workflow" / "stook").rglob("*")
        if path.is_file() and path.suffix not in {".py", ".pyc", ".nbi", ".nbc"}
    }
    for path in files:
        package = ".".join(("stook", *path.parent.parts))
        patterns = SETTINGS["package-data"].get(package, [])
        assert any(path.match(pattern) for pattern in patterns), f"{path} is not in package-data"


def test_snakefile_of_the_checkout_is_found():
    assert snakefile() == ROOT / "Snakefile"
    for name in ("Snakefile", "rules/common.smk"):
        assert any(Path(name).match(p) for p in SETTINGS["package-data"]["stook.pipeline"])
        assert (ROOT / name).is_file()


def test_every_rule_calls_the_job_of_its_name():
    rules = {}
    for path in (ROOT / "rules").glob("*.smk"):
        for block in path.read_text(encoding="utf-8").split("\nrule ")[1:]:
            rules[block.split(":", 1)[0]] = block
        if path.stem != "common":
            first = path.read_text(encoding="utf-8").split("rule ")[1]
            rules.setdefault(first.split(":", 1)[0], first)
    assert set(rules) == set(RULES)
    for name, block in rules.items():
        stage, _, job = name.partition("_")
        assert f"-m stook.job {stage} {job} " in block
