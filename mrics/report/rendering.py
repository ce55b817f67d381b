"""The template environment: everything that comes from outside is escaped."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.report.words import (
    clock,
    metric_value,
    metric_words,
    number,
    numbered,
    percent,
    settings_text,
)
from mrics.study.files import replace_text


def render(template: str, **values: Any) -> str:
    """A template as text, with the house filters; undefined names are errors."""
    environment = Environment(
        loader=PackageLoader("mrics.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= {
        "clock": clock,
        "number": number,
        "percent": percent,
        "settings": settings_text,
        "count": numbered,
    }
    environment.globals |= {
        "caution": RESEARCH_ONLY,
        "metric_value": metric_value,
        "metric_words": metric_words,
    }
    return environment.get_template(template).render(**values)


def write_page(path: Path, text: str) -> Path:
    """Write a page whole or not at all."""
    try:
        replace_text(path, text)
    except OSError as problem:
        raise ReportError(
            f"{path.name} cannot be written ({problem.strerror}).",
            str(path.parent),
            "Give a folder that exists and may be written to.",
        ) from problem
    return path
