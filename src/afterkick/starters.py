"""The starter designs: what ``new`` writes and ``tour`` walks through."""

import re

from afterkick.design.limits import visible
from afterkick.design.names import identifier_fault
from afterkick.errors import Problem, Refused
from afterkick.resources import resource_folder

__all__ = ["STARTERS", "starter_text"]

STARTERS = {
    "slam": "a differential equation with initial conditions",
    "rudder": "blocks: compensator, notch, low-pass",
    "bilge": "zeros and poles",
    "yaw": "a slow pole at a high rate",
    "echo": "a circuit to be replaced, with dead time",
    "helm": "a controller, its integral held within limits",
}
"""Name and what the design shows."""


def starter_text(starter: str, name: str | None = None) -> str:
    """The TOML of a starter, under another name if one is given.

    :raises Refused: a name that is no C identifier of our own.
    """
    text = (resource_folder("templates") / "starters" / f"{starter}.toml").read_text(encoding="utf-8")
    if name is None:
        return text
    fault = identifier_fault(name)
    if fault is not None:
        accepted = "a C identifier: the prefix of every emitted symbol"
        raise Refused(Problem("NAME", f"{visible(name)}, {fault}", accepted, "choose another name"))
    renamed, times = re.subn(r'^name  = "\w+"', lambda _: f'name  = "{name}"', text, count=1, flags=re.MULTILINE)
    assert times == 1, "a starter without a name line"
    return renamed
