"""Stands in for the science of every stage: jobs that only write small files.

Put on PYTHONPATH, it replaces ``stook.<stage>.job`` in every process, so that the engine can be
tested in seconds: failing, slow and killed jobs included. Environment:

- STAND_IN_FAIL: ``rule`` or ``rule value`` of the jobs that fail with a user's error
- STAND_IN_CRASH: the same, for a defect with a traceback
- STAND_IN_SECONDS: how long every job takes
- STAND_IN_TRACE: a file that gets a line per finished job
"""

from __future__ import annotations

import importlib.abc
import importlib.machinery
import os
import re
import sys
import time
from pathlib import Path
from types import ModuleType

RISK = (
    *("partition", "emergence", "classes", "robustness", "levels", "windows"),
    *("shortfall", "joint", "losses", "supply"),
)
STAGES = ("prepare", "correct", "season", "yields", "regions", "ensemble", "trend", "report")


def outputs(layout, rule, given):
    """Return the files a rule writes, as its rule file says."""
    from stook.engine.run import snakefile

    rules = snakefile().parent / "rules" / f"{rule.partition('_')[0]}.smk"
    block = rules.read_text(encoding="utf-8").split(f"rule {rule}:\n")[1].split("\nrule ")[0]
    section = re.search(r"^    output:\n((?: {8}.*\n)+)", block, re.MULTILINE)[1]
    paths = eval(f"dict({section})", {"LAYOUT": layout})
    return [Path(str(path).format(**given)) for path in paths.values()]


def matches(variable, rule, given):
    """Tell whether a rule and its wildcards are what an environment variable names."""
    name, _, value = os.environ.get(variable, "").partition(" ")
    return name == rule and (not value or value in given.values())


def run(rule, assessment, given):
    """Write the files of a job, slowly or not at all as the environment says."""
    from stook.assessment.layout import Layout
    from stook.audit.ledger import Job
    from stook.errors import InputError

    with Job(assessment, rule, [], given) as job:
        paths = [job.claim(path) for path in outputs(Layout.of(assessment), rule, given)]
        for path in paths:
            path.write_text("half", encoding="utf-8")
        time.sleep(float(os.environ.get("STAND_IN_SECONDS", "0")))
        if matches("STAND_IN_FAIL", rule, given):
            raise InputError("climate.nc: tas is broken")
        if matches("STAND_IN_CRASH", rule, given):
            raise ZeroDivisionError("a defect")
        for path in paths:
            path.write_text(f"{rule} {sorted(given.items())}", encoding="utf-8")
    if "STAND_IN_TRACE" in os.environ:
        with Path(os.environ["STAND_IN_TRACE"]).open("a", encoding="utf-8") as trace:
            print(rule, *given.values(), file=trace)


class Finder(importlib.abc.MetaPathFinder, importlib.abc.Loader):
    """Makes the stand-in modules."""

    def find_spec(self, name, path=None, target=None):
        if name in {f"stook.{stage}.job" for stage in STAGES}:
            return importlib.machinery.ModuleSpec(name, self)
        return None

    def create_module(self, spec):
        return None

    def exec_module(self, module: ModuleType):
        stage = module.__name__.split(".")[1]

        def get(name):
            return lambda assessment, **given: run(f"{stage}_{name}", assessment, given)

        module.__getattr__ = get


sys.meta_path.insert(0, Finder())
