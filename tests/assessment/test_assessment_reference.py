"""The reference of the assessment file is what the models say."""

from __future__ import annotations

import re
from pathlib import Path

import yaml
from stook.assessment.documents import validate
from stook.assessment.reference import BEGIN, END, reference
from stook.assessment.schema import Assessment

PAGE = (Path(__file__).parents[2] / "docs" / "assessment-file.md").read_text(encoding="utf-8")


def test_page_holds_the_reference():
    """If not: python -m stook.assessment.reference, between the marks of the page."""
    _, _, rest = PAGE.partition(BEGIN)
    assert rest.partition(END)[0].strip() == reference()


def test_every_link_has_its_heading():
    text = reference()
    headings = {line.strip("# ").replace(" ", "-") for line in re.findall(r"^### .*$", text, re.M)}
    assert set(re.findall(r"\(#([a-z-]+)\)", text)) <= headings


def test_every_key_is_described():
    rows = re.findall(r"^\| `(\w+)` \| (.*?) \| (.*?) \| (.*) \|$", reference(), re.M)
    assert len(rows) > 80
    told = {"measure", "form", "variable", "index", "coefficient", "coefficients", "knots"}
    assert {key for key, _, _, meaning in rows if not meaning.strip()} <= told


def test_example_of_the_page_loads():
    text = PAGE.split("```yaml\n")[1].split("```")[0]
    loaded = validate(yaml.safe_load(text), Assessment, Path("assessment.yaml"))
    assert loaded.systems == [("maize", "rainfed")]
