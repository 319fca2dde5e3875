"""What would run and why, in words, from the reasons the engine gives."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from stook.assessment.layout import STAGES
from stook.engine.progress import Planned, stage_of

_DIGEST = re.compile(r"([a-z]+):([0-9a-f]{8}|absent)")
_FIXED = {
    "Missing output files": "not made yet",
    "Incomplete output files": "was interrupted",
    "Set of input files has changed since last execution": "other input files",
    "Code has changed since last execution": "the rule changed",
    "Forced execution": "asked for",
}
_UPSTREAM = "Input files updated by another job"
_INPUT = "Updated input files"
_PARAMS = "Params have changed since last execution"


@dataclass(frozen=True)
class Line:
    """Jobs of one rule that would run.

    Attributes
    ----------
    why
        The reasons, the most frequent first, in words.
    """

    stage: str
    name: str
    count: int
    why: str


def lines(planned: Sequence[Planned]) -> list[Line]:
    """Return one line per rule, in the order of the stages."""
    rules: dict[str, list[Planned]] = {}
    for job in planned:
        rules.setdefault(job.rule, []).append(job)
    ordered = sorted(rules, key=lambda rule: STAGES.index(stage_of(rule)))
    result = []
    for rule in ordered:
        reasons = Counter(why(job.reason) for job in rules[rule])
        words = [
            f"{text} ({count})" if len(reasons) > 1 else text
            for text, count in reasons.most_common()
        ]
        stage, _, name = rule.partition("_")
        result.append(Line(stage, name, len(rules[rule]), "; ".join(words)))
    return result


def why(reason: str) -> str:
    """Return an engine's reason in words of this program.

    A job whose input is made again by another job and that has no reason of its own ``follows
    other jobs``; of a changed assessment the parts that changed are named.
    """
    words: dict[str, None] = {}
    for part in reason.split("; "):
        kind, _, detail = part.partition(": ")
        if kind == _PARAMS:
            words[f"changed: {', '.join(changed_parts(detail))}"] = None
        elif kind == _INPUT:
            words[f"changed input: {_shortened(detail.split(', '))}"] = None
        elif kind in _FIXED:
            words[_FIXED[kind]] = None
        elif kind != _UPSTREAM:
            words[part] = None
    return ", ".join(words) or "follows other jobs"


def changed_parts(detail: str) -> list[str]:
    """Return the names of the digests that differ between ``before: ...`` and ``now: ...``."""
    before, _, now = detail.partition(" now: ")
    pairs = set(_DIGEST.findall(before)) ^ set(_DIGEST.findall(now))
    return sorted({name for name, _ in pairs}) or ["settings"]


def _shortened(files: Sequence[str]) -> str:
    return ", ".join(files) if len(files) <= 2 else f"{files[0]} and {len(files) - 1} more"
