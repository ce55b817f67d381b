"""A sampling table with its sheet of pictures."""

from __future__ import annotations

from pathlib import Path

from mrics.caution import RESEARCH_ONLY
from mrics.protocol import Protocol
from mrics.report.arms import axis_name
from mrics.report.pattern_figures import pattern_figure, picture_of
from mrics.study import Exported, add_exported_row, export_draw


def export_table(
    protocol: Protocol, arm: str, draw: int, out: str | Path, study: str | Path | None = None
) -> tuple[Exported, Path]:
    """Write table, mask and picture of one draw; with ``study``, its row in the study's page too.

    Parameters
    ----------
    protocol : Protocol
        The protocol.
    arm : str
        Id of the arm.
    draw : int
        Number of the draw, from 0.
    out : str or Path
        Folder to write to.
    study : str or Path, optional
        Finished study of this protocol, whose page is then drawn again.

    Returns
    -------
    tuple of Exported and Path
        What was written, and the picture.
    """
    exported = export_draw(protocol, arm, draw, out)
    grid = {
        "phase_axis": protocol.grid.phase_axis,
        "partition_axis": protocol.grid.partition_axis,
    }
    names = axis_name("phase", grid), axis_name("partition", grid)
    figure = pattern_figure(picture_of(exported.played.pattern, *names))
    table = exported.played.pattern.hash[:16]
    figure.suptitle(f"{exported.label}, draw {draw}, table {table}\n{RESEARCH_ONLY}", fontsize=8)
    sheet = Path(out) / f"{arm}_draw{draw}.png"
    figure.savefig(sheet, dpi=200)
    if study is not None:
        from mrics.report.page import write_report

        add_exported_row(study, protocol, exported)
        write_report(study)
    return exported, sheet
