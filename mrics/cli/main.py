"""Commands. Each reads its arguments, calls one function of another room and prints."""

from __future__ import annotations

import io
import sys
from pathlib import Path
from typing import Annotated, Any

import typer

from mrics.caution import RESEARCH_ONLY
from mrics.errors import MricsError

app = typer.Typer(
    name="mrics",
    help=f"Plan MRI undersampling on fully sampled scans.\n\n{RESEARCH_ONLY}",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

_STOPPED = 130

Force = Annotated[bool, typer.Option("--force", help="Replace what is there.")]
Quick = Annotated[bool, typer.Option("--quick", help="Few slices, for a first look.")]
Workers = Annotated[
    int | None,
    typer.Option("--workers", min=1, help="Processes (default: as cores and memory allow)."),
]
Cluster = Annotated[
    str | None,
    typer.Option("--cluster", help="Dask scheduler, tcp://host:port or local, in place of those."),
]
ProtocolFile = Annotated[Path, typer.Argument(metavar="PROTOCOL", help="Protocol file (TOML).")]
StudyFolder = Annotated[Path, typer.Argument(metavar="DIR", help="Folder of a finished study.")]


def main() -> None:
    """Run the command line; bad input is told in three lines and exits with status 2."""
    arguments = sys.argv[1:]
    debug, verbose = "--debug" in arguments, "--verbose" in arguments
    arguments = [a for a in arguments if a not in ("--debug", "--verbose")]
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            # A terminal that lacks a letter of a title or a file name shows a question mark.
            stream.reconfigure(errors="replace")
    if verbose:
        from mrics.cli.log import log_to_terminal

        log_to_terminal()
    try:
        app(args=arguments, standalone_mode=True)
    except (MricsError, OSError, MemoryError) as error:
        if debug:
            raise
        typer.echo(f"mrics: {_told(error)}", err=True)
        sys.exit(2)
    except (KeyboardInterrupt, SystemExit) as stop:
        # typer turns Ctrl-C into status 130.
        if isinstance(stop, SystemExit) and stop.code != _STOPPED:
            raise
        typer.echo("\nmrics: stopped; finished units are kept, run again to go on", err=True)
        sys.exit(_STOPPED)


def _told(error: MricsError | OSError | MemoryError) -> MricsError:
    """What a person is told of bad input, a full disk or too little memory."""
    if isinstance(error, MricsError):
        return error
    if isinstance(error, MemoryError):
        return MricsError("There is not enough memory.", "", "Take fewer --workers or a crop.")
    return MricsError(
        f"A file cannot be read or written ({error.strerror or error}).",
        str(error.filename or ""),
        "Check the disk's room and your permissions.",
    )


def _version(wanted: bool) -> None:
    if wanted:
        import mrics

        typer.echo(f"mrics {mrics.__version__}\n{RESEARCH_ONLY}")
        raise typer.Exit


@app.callback()
def options(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show the traceback of an error.")] = False,
    verbose: Annotated[bool, typer.Option("--verbose", help="Log what is done, and when.")] = False,
) -> None:
    """Options of every command."""


@app.command()
def demo(
    out: Annotated[Path, typer.Option("--out", help="Folder to write to.")] = Path("mrics-demo"),
) -> None:
    """Study the shipped sample scans with a shipped protocol and write a report.

    Example: mrics demo --out knee-demo
    """
    from mrics.cli.shipped import demo_protocol

    _run(demo_protocol(), out, quick=False, force=False, workers=None)


@app.command()
def new(
    scans: Annotated[list[Path], typer.Argument(metavar="SCAN...", help="NIfTI files.")],
    out: Annotated[Path, typer.Option("--out", help="Protocol file to write.")],
    force: Force = False,
) -> None:
    """Write a commented protocol from the scans' headers, ready to run.

    Example: mrics new knee_a.nii.gz knee_b.nii.gz --out knee.toml
    """
    from mrics.cli.writing import write_new
    from mrics.protocol import new_protocol

    write_new(out, new_protocol(scans, out=out), force)
    typer.echo(f"protocol: {out}\nnext:     mrics plan {out}")


@app.command()
def plan(
    protocol: ProtocolFile,
    page: Annotated[
        Path | None, typer.Option("--page", help="Also draw the patterns, as a page written here.")
    ] = None,
    rank: Annotated[
        bool,
        typer.Option(
            "--rank", help="Also rank the patterns by small features; reads the first scan."
        ),
    ] = False,
) -> None:
    """Lines acquired, achieved R and scan time of every arm, without touching image data.

    Example: mrics plan knee.toml --page knee-plan.html
    """
    from mrics.cli.tables import plan_table
    from mrics.protocol import load_protocol
    from mrics.study import plan_study

    study_plan = plan_study(load_protocol(protocol))
    typer.echo(plan_table(study_plan))
    ranking = None
    if rank:
        from mrics.cli.tables import ranking_table
        from mrics.study import rank_plan

        ranking = rank_plan(study_plan)
        typer.echo(f"\n{ranking_table(ranking)}")
    if page is not None:
        from mrics.report import write_plan_page

        typer.echo(f"\npage: {write_plan_page(study_plan, page, ranking)}")
    typer.echo(RESEARCH_ONLY)


@app.command()
def run(
    protocol: ProtocolFile,
    out: Annotated[Path, typer.Option("--out", help="Study folder.")],
    quick: Quick = False,
    force: Force = False,
    workers: Workers = None,
    cluster: Cluster = None,
    require_pass: Annotated[
        bool, typer.Option("--require-pass", help="Exit with status 3 when no arm passes.")
    ] = False,
) -> None:
    """Undersample, recover and measure; write results, maps and the report.

    Example: mrics run knee.toml --out knee-study
    """
    results = _run(protocol, out, quick=quick, force=force, workers=workers, cluster=cluster)
    if require_pass and results["verdict"]["arm"] is None:
        raise typer.Exit(3)


@app.command()
def report(
    folder: StudyFolder,
    pdf: Annotated[bool, typer.Option("--pdf", help="Also write a PDF for printing.")] = False,
    figures: Annotated[
        bool, typer.Option("--figures", help="Also write every figure as PNG and SVG.")
    ] = False,
) -> None:
    """Draw the page again from results.json and the stored maps.

    Example: mrics report knee-study --pdf
    """
    from mrics.report import write_document, write_figures, write_report

    typer.echo(f"report: {write_report(folder)}")
    if pdf:
        typer.echo(f"pdf: {write_document(folder)}")
    if figures:
        typer.echo(f"figures: {len(write_figures(folder))} files in {folder / 'figures'}")
    typer.echo(RESEARCH_ONLY)


@app.command()
def compare(
    before: Annotated[Path, typer.Argument(metavar="DIR_A", help="Folder of a finished study.")],
    after: Annotated[Path, typer.Argument(metavar="DIR_B", help="Folder of another.")],
    page: Annotated[Path | None, typer.Option("--page", help="Also write a page here.")] = None,
) -> None:
    """Two studies side by side: what changed in the protocol, which numbers moved.

    Example: mrics compare knee-study knee-study-2
    """
    from mrics.cli.tables import difference_lines
    from mrics.report import write_compare_page
    from mrics.study import compare_studies

    typer.echo(difference_lines(compare_studies(before, after)))
    if page is not None:
        typer.echo(f"page: {write_compare_page(before, after, page)}")
    typer.echo(RESEARCH_ONLY)


@app.command()
def export(
    protocol: ProtocolFile,
    arm: Annotated[str, typer.Option("--arm", help="Id of the arm, as in results.json.")],
    out: Annotated[Path, typer.Option("--out", help="Folder to write to.")],
    draw: Annotated[int, typer.Option("--draw", min=0, help="Number of the draw.")] = 0,
    study: Annotated[
        Path | None,
        typer.Option("--study", help="Finished study that gets a row for exactly this draw."),
    ] = None,
) -> None:
    """Sampling table of one draw: CSV and JSON in playing order, NIfTI mask, picture.

    Example: mrics export knee.toml --arm power-law-r3-wavelet --draw 1 --out table
    """
    from mrics.protocol import load_protocol
    from mrics.report import export_table

    exported, sheet = export_table(load_protocol(protocol), arm, draw, out, study)
    for path in (*exported.files, sheet):
        typer.echo(path)
    typer.echo(f"table hash: {exported.played.pattern.hash}\n{RESEARCH_ONLY}")


@app.command()
def recover(
    kspace: Annotated[Path, typer.Argument(metavar="KSPACE", help=".npy or complex NIfTI.")],
    pattern: Annotated[Path, typer.Option("--pattern", help="Table or mask that was played.")],
    out: Annotated[Path, typer.Option("--out", help="Image to write (.nii.gz).")],
    method: Annotated[str, typer.Option("--method", help="Recovery method.")] = "wavelet",
    settings: Annotated[
        list[str] | None, typer.Option("--set", help="Setting of the method, key=value.")
    ] = None,
    noise: Annotated[
        Path | None, typer.Option("--noise", help="Noise samples, .npy (channel, ...).")
    ] = None,
    channel_axis: Annotated[
        int | None, typer.Option("--channel-axis", min=0, help="Axis of receive channels, from 0.")
    ] = None,
    axes: Annotated[
        str | None,
        typer.Option("--axes", help="File axes of readout, phase (and partition), e.g. ij or ijk."),
    ] = None,
    readout_transformed: Annotated[
        bool, typer.Option("--readout-transformed", help="3-D readout is in image space already.")
    ] = False,
    like: Annotated[
        Path | None, typer.Option("--like", help="NIfTI whose position the image takes.")
    ] = None,
) -> None:
    """Recover measured, undersampled k-space; write the image and its certificate.

    Example: mrics recover k.npy --pattern table.csv --channel-axis 1 --out image.nii.gz
    """
    from mrics.cli.tables import certificate_lines
    from mrics.cli.writing import read_axes, read_settings
    from mrics.study import recover_measured

    _say_compiling()
    content = recover_measured(
        kspace,
        pattern,
        out,
        method=method,
        settings=read_settings(settings or []),
        noise=noise,
        channel_axis=channel_axis,
        axes=read_axes(axes),
        readout_transformed=readout_transformed,
        like=like,
    )
    typer.echo(f"image: {out}\n{certificate_lines(content)}\n{RESEARCH_ONLY}")


@app.command()
def inspect(
    scans: Annotated[list[Path], typer.Argument(metavar="SCAN...", help="NIfTI files.")],
    phase: Annotated[
        Path | None, typer.Option("--phase", help="Phase file of a single magnitude scan.")
    ] = None,
    imaginary: Annotated[
        Path | None, typer.Option("--imaginary", help="Imaginary part of a single real scan.")
    ] = None,
    axes: Annotated[
        str, typer.Option("--axes", help="File axes of readout, phase (and partition).")
    ] = "ij",
    remedied: Annotated[
        Path | None, typer.Option("--remedied", help="Also write the scan with its remedies here.")
    ] = None,
) -> None:
    """What was done to a scan before it came here, and what that does to a study.

    Example: mrics inspect knee_mag.nii.gz --phase knee_phase.nii.gz
    """
    from mrics.cli.tables import inspection_lines
    from mrics.cli.writing import read_axes, write_remedied
    from mrics.scan import read_scan
    from mrics.scan.fitness import inspect_fully

    for path in scans:
        scan = read_scan(path, phase=phase, imaginary=imaginary)
        inspection = inspect_fully(scan, read_axes(axes))
        typer.echo(inspection_lines(scan, inspection))
        if remedied is not None:
            told = write_remedied(scan, inspection, remedied)
            typer.echo(f"written: {remedied} ({'; '.join(told) or 'nothing to remedy'})")
            break
    typer.echo(RESEARCH_ONLY)


@app.command()
def train(
    source: Annotated[
        list[Path], typer.Argument(metavar="PROTOCOL|SCAN...", help="Protocol, or NIfTI files.")
    ],
    out: Annotated[Path, typer.Option("--out", help="Dictionary file to write (.npz).")],
    patch: Annotated[int, typer.Option("--patch", help="Samples of a patch per side.")] = 5,
    depth: Annotated[int, typer.Option("--depth", help="Planes of a 3-D patch.")] = 1,
    joint: Annotated[
        bool, typer.Option("--joint", help="Stack all frames of a place in one patch.")
    ] = False,
    kind: Annotated[str, typer.Option("--kind", help="real or complex atoms.")] = "real",
    atoms: Annotated[int, typer.Option("--atoms", help="Atoms to learn.")] = 256,
    method: Annotated[str, typer.Option("--method", help="online or k-svd.")] = "online",
    axes: Annotated[
        str, typer.Option("--axes", help="Readout, phase (and partition) of NIfTI files.")
    ] = "ij",
    seed: Annotated[int, typer.Option("--seed", min=0, help="Same seed, same file.")] = 0,
    force: Force = False,
) -> None:
    """Learn a patch dictionary from fully sampled scans, for recovery = "dictionary".

    Example: mrics train knee.toml --out knee-dictionary.npz
    """
    from mrics.cli.progress import progress_line
    from mrics.cli.tables import dictionary_lines
    from mrics.cli.writing import read_axes
    from mrics.study import train as learn

    with progress_line("steps") as progress:
        learned = learn(
            source,
            out,
            axes=read_axes(axes),
            force=force,
            progress=progress,
            patch=patch,
            depth=depth,
            joint=joint,
            kind=kind,
            atoms=atoms,
            method=method,
            seed=seed,
        )
    typer.echo(f"dictionary: {out}\n{dictionary_lines(learned)}\n{RESEARCH_ONLY}")


@app.command()
def optimism(
    protocol: ProtocolFile,
    out: Annotated[Path, typer.Option("--out", help="Folder for both studies.")],
    quick: Quick = False,
    workers: Workers = None,
) -> None:
    """The same study on the scans as they are and on the scans remedied, and the difference.

    Example: mrics optimism knee.toml --out knee-optimism
    """
    from mrics.cli.stopping import stoppable
    from mrics.cli.tables import optimism_lines
    from mrics.protocol import load_protocol
    from mrics.study import optimism as compare_with_remedied

    with stoppable() as progress:
        rows = compare_with_remedied(
            load_protocol(protocol), out, quick=quick, workers=workers, progress=progress
        )
    typer.echo(f"{optimism_lines(rows)}\n{RESEARCH_ONLY}")


def _say_compiling() -> None:
    from mrics.numerics.wavelets import kernels_kept

    if not kernels_kept():
        typer.echo("first run on this machine: kernels are compiled, once", err=True)


def _run(protocol: Path, out: Path, **settings: Any) -> dict[str, Any]:
    from mrics.cli.stopping import stoppable
    from mrics.cli.tables import verdict_lines
    from mrics.report import run_study

    _say_compiling()
    with stoppable() as progress:
        results = run_study(protocol, out, progress=progress, **settings)
    typer.echo(verdict_lines(results))
    typer.echo(f"report:  {out / 'report.html'}\n{RESEARCH_ONLY}")
    return results
