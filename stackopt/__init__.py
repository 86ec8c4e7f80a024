"""stackopt: find the multilayer shield stacks that meet an attenuation mask at least mass, cost and thickness.

>>> import stackopt
>>> sorted(stackopt.__all__)
['Front', 'attenuation', 'prove', 'read_problem', 'search']
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from stackopt.evaluate import attenuation
    from stackopt.front import Front
    from stackopt.readers import read_problem
    from stackopt.run import prove, search

__all__ = ["Front", "attenuation", "prove", "read_problem", "search"]

_HOME = {
    "Front": "stackopt.front",
    "attenuation": "stackopt.evaluate",
    "prove": "stackopt.run",
    "read_problem": "stackopt.readers",
    "search": "stackopt.run",
}


def __getattr__(name: str) -> Any:
    """Import a public name on first use, so that a command starts without everything else."""
    if name not in _HOME:
        raise AttributeError(f"module 'stackopt' has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_HOME[name]), name)
