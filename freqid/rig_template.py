"""Which rig sheet does a new test folder start with?

The built-in vane, a spring-centred air vane on a test bench, with every key explained. The text is
written from the fields of `freqid.rig_tables`, so it cannot fall behind what is accepted.
"""

from __future__ import annotations

import json
from dataclasses import fields

from freqid.rig import TABLES, Rig, parse_rig
from freqid.rig_tables import KeyRule, Range

__all__ = ["built_in_vane", "rig_sheet_text"]

_OPENING = """\
# Rig sheet: what is known of the rig before the test. Replace the values by those of your rig.
# The limits of the maker come first. Angles are in angle_unit; uncertainties are relative, at 95 %.
"""

_TABLE_COMMENTS = {
    "rig": "",
    "limits": "what must never be exceeded",
    "output": "what turns samples into voltage",
    "angle_sensor": "what watches the angle",
    "step_test": "what it already told; used to plan, never to estimate; leave out what is not known",
    "tolerance": "what counts as agreement of the two tests",
    "requirements": "acceptance limits, judged with their uncertainty; every line is optional",
    "simulated": "the rig used by rehearse and by capture --simulate; every key may be left out",
}

_COMMENT_COLUMN = 40


def rig_sheet_text() -> str:
    """The commented rig sheet of the built-in vane, TOML, every key with unit, allowed range and meaning."""
    return "\n".join([_OPENING, *(_table_text(name) for name in TABLES)])


def built_in_vane() -> Rig:
    """The rig that `rig_sheet_text` describes."""
    return parse_rig(rig_sheet_text(), "built-in vane")


def _table_text(name: str) -> str:
    comment = _TABLE_COMMENTS[name]
    heading = f"[{name}]".ljust(_COMMENT_COLUMN) + f"# {comment}" if comment else f"[{name}]"
    lines = [_line(key.name, key.metadata["rule"]) for key in fields(TABLES[name])]
    return "\n".join([heading, *lines]) + "\n"


def _line(name: str, rule: KeyRule) -> str:
    # JSON writes text, numbers and true/false exactly as TOML does.
    assignment = f"# {name} =" if rule.template is None else f"{name} = {json.dumps(rule.template, ensure_ascii=False)}"
    return f"{assignment:<{_COMMENT_COLUMN - 1}} # {_comment(rule)}"


def _comment(rule: KeyRule) -> str:
    if isinstance(rule.allowed, Range):
        unit = f"{rule.unit}; " if rule.unit else ""
        return f"{unit}{rule.explanation} ({rule.allowed})"
    if isinstance(rule.allowed, tuple):
        return f"{rule.explanation}: {' or '.join(json.dumps(word) for word in rule.allowed)}"
    return rule.explanation
