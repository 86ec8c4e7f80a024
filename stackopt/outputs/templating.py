"""HTML out of templates that escape whatever a user wrote."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

from jinja2 import Environment, FunctionLoader, StrictUndefined


def read_template(name: str) -> str:
    """Read a file of the package's templates."""
    return (files("stackopt.outputs") / "templates" / name).read_text(encoding="utf-8")


@cache
def _environment() -> Environment:
    return Environment(
        loader=FunctionLoader(read_template),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def render(name: str, **values: object) -> str:
    """Fill a template; everything is escaped but what the template itself marks as safe."""
    return _environment().get_template(name).render(**values)
