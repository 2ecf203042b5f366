"""The templates, with escaping always on."""

from __future__ import annotations

from functools import lru_cache
from importlib.resources import files
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from jinja2 import Environment


@lru_cache(maxsize=1)
def _environment() -> Environment:
    from jinja2 import Environment, FunctionLoader, StrictUndefined
    from markupsafe import Markup

    from benchkit.reports import words

    folder = files("benchkit.reports")
    environment = Environment(
        loader=FunctionLoader(lambda name: (folder / name).read_text(encoding="utf-8")),
        autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    environment.globals["style"] = Markup((folder / "page.css").read_text(encoding="utf-8"))
    environment.globals["VERDICTS"] = words.VERDICTS
    environment.filters["sentence"] = words.sentence
    environment.filters["degrees"] = words.degrees
    environment.filters["moment"] = words.moment
    return environment


def render(template: str, **context: object) -> str:
    """Fill a template; every value is escaped unless it was made as markup here."""
    return _environment().get_template(template).render(**context) + "\n"
