"""The page, figures and tables of a finished study, drawn from its folder alone."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mrics.report.compare_page import write_compare_page
    from mrics.report.document import write_document
    from mrics.report.export import export_table
    from mrics.report.figure_files import write_figures
    from mrics.report.page import write_report
    from mrics.report.plan_page import write_plan_page
    from mrics.report.run import run_study

__all__ = [
    "export_table",
    "run_study",
    "write_compare_page",
    "write_document",
    "write_figures",
    "write_plan_page",
    "write_report",
]

_HOME = {
    "export_table": "mrics.report.export",
    "run_study": "mrics.report.run",
    "write_compare_page": "mrics.report.compare_page",
    "write_document": "mrics.report.document",
    "write_figures": "mrics.report.figure_files",
    "write_plan_page": "mrics.report.plan_page",
    "write_report": "mrics.report.page",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_HOME[name]), name)
