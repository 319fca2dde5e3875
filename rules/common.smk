import shlex
import sys

from stook.assessment.layout import Layout
from stook.engine.plan import RELATIVE

# Paths of results, relative to the results folder, which is the working directory.
LAYOUT: Layout = RELATIVE


# Simulations are MODEL_SCENARIO_REALISATION; crops and systems hold no underscore.
wildcard_constraints:
    simulation="[^/]+",
    crop="[^/_]+",
    system="[^/_]+",
    scenario="[^/_]+",
    tile="[0-9]+",


# Jobs run in the interpreter that runs Snakemake. It stands in the prefix and not in the command,
# so that another virtual environment does not count as a change of the rule.
shell.prefix(f"set -euo pipefail; STOOK_PYTHON={shlex.quote(sys.executable)}; ")
