"""The command line: arguments to one function each, exit status, and everything that is printed."""

# ruff: noqa: PLC0415  a command loads what it needs when it runs, so that --help is there at once

import os
from collections.abc import Iterable, Sequence
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING

import click

from vasohm.errors import Problem, RequestError, VasohmError
from vasohm.study.ending import CAUTION, EXIT_OK, EXIT_REQUEST, EXIT_SOME_FAILED

if TYPE_CHECKING:
    from vasohm.config.study_file import Study
    from vasohm.study.events import Listener
    from vasohm.study.run import RunReport, RunRequest


def _number(_ctx: click.Context, _option: click.Parameter, text: str | None) -> float | None:
    """Read a number; a decimal comma is told for what it is."""
    from vasohm.config.csv_table import CellError, Range, parse_number

    try:
        return None if text is None else parse_number(text, Range())
    except CellError as wrong:
        raise click.BadParameter(str(wrong)) from None


_FOLDER = click.Path(path_type=Path)
_STUDY = click.argument("study_file", metavar="STUDY.toml", type=click.Path(path_type=Path))


def run_command(words: Sequence[str] | None = None) -> int:
    """Run the command line; what is wrong with a request is told line by line, without a traceback.

    Parameters
    ----------
    words : sequence of str, optional
        The command's words; those that the process was started with where None.

    Returns
    -------
    int
        The exit status.
    """
    try:
        status = commands.main(words, prog_name="vasohm", standalone_mode=False)
    except RequestError as wrong:
        _complain(str(problem) for problem in wrong.problems)
        return EXIT_REQUEST
    except VasohmError as wrong:
        _complain([str(wrong)])
        return EXIT_REQUEST
    except click.ClickException as wrong:
        wrong.show()
        return wrong.exit_code
    except BrokenPipeError:  # whoever read our lines has gone
        _say_no_more(1)
        return EXIT_SOME_FAILED
    except OSError as fault:
        name = Path(os.fsdecode(fault.filename)).name if fault.filename else "the results"
        _complain([f"{name}: {fault.strerror or fault}. What was finished is kept; mend this and run again."])
        return EXIT_SOME_FAILED
    return status if isinstance(status, int) else EXIT_OK


@click.group(epilog=CAUTION, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="vasohm", prog_name="vasohm")
def commands() -> None:
    """Vascular resistance, with its uncertainty, from images of vessel beds."""


@commands.command(epilog=CAUTION)
@click.argument("sources", metavar="STUDY.toml | IMAGE...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--out", required=True, type=_FOLDER, help="Folder for the results.")
@click.option(
    "--pixel-size",
    metavar="NUMBER",
    callback=_number,
    help="Edge of a pixel in micrometres, where images are named and their files do not say it.",
)
@click.option("--preset", default="fundus", show_default=True, help="Settings where images are named and no study.")
@click.option("--workers", type=click.IntRange(min=1), help="Processes; as many as may be used where not given.")
@click.option("--part", metavar="K/N", help="Measure part K of N only, or auto in an array job; gather joins parts.")
@click.option("--dask", metavar="ADDRESS", help="Measure on the workers of this Dask scheduler, which runs already.")
@click.option("--dask-insecure", is_flag=True, help="Take a scheduler of another machine without certificates.")
@click.option("--only", multiple=True, metavar="IMAGE_ID ...", help="Measure these images only.")
@click.option("--dry-run", is_flag=True, help="Say for each image whether it would run and why.")
@click.option("--force", is_flag=True, help="Take over a folder that holds another study's results.")
@click.option("--quiet", is_flag=True, help="Show no progress, the last line only.")
@click.option("--log-json", type=_FOLDER, metavar="FILE", help="Add what happens to a file, as lines of JSON.")
def measure(  # noqa: PLR0913  the options of the command
    *,
    sources: tuple[Path, ...],
    out: Path,
    pixel_size: float | None,
    preset: str,
    workers: int | None,
    part: str | None,
    dask: str | None,
    dask_insecure: bool,
    only: tuple[str, ...],
    dry_run: bool,
    force: bool,
    quiet: bool,
    log_json: Path | None,
) -> int:
    """Measure the images of a study, or images named here.

    The same command again measures only what is not current, and carries an interrupted run on.

    \b
    Exit status: 0 all images measured; 1 some failed (failures.csv says why);
    2 the request is wrong and nothing was done; 130, 143 interrupted.
    """  # noqa: D301  the escape is click's sign for lines that stay as they are
    from vasohm.study.cores import usable_cores
    from vasohm.study.parts import parse_part
    from vasohm.study.run import RunRequest, decide

    study, only = _study_or_images(sources, only, pixel_size=pixel_size, preset=preset)
    request = RunRequest(
        out=out.absolute(),
        workers=workers or usable_cores().count,
        part=None if part is None else parse_part(part, os.environ),
        only=only,
        force=force,
        dask="" if dask is None else _dask_address(dask, insecure=dask_insecure, workers=workers),
    )
    if dry_run:
        for decision in decide(study, request):
            click.echo(f"{decision.image_id} {f'run: {decision.reason}' if decision.reason else 'skip: current'}")
        return EXIT_OK
    report = _run(study, request, quiet=quiet, log_json=log_json)
    from vasohm.study.progress import closing_lines

    lines = closing_lines(report, out, in_parts=request.part is not None)
    try:
        for line in lines[-1:] if quiet else lines:
            click.echo(line)
    except OSError:  # the results are whole, and study.json says how it ended
        _say_no_more(1)
    return report.state.exit_status


def _dask_address(text: str, *, insecure: bool, workers: int | None) -> str:
    from vasohm.study.dask_meeting import safe_address

    if workers is not None:
        message = "is for processes of this machine; on a Dask cluster all workers take part. Leave it out."
        raise RequestError([Problem(file="--workers", value=str(workers), message=message)])
    return safe_address(text, insecure=insecure)


def _run(study: "Study", request: "RunRequest", *, quiet: bool, log_json: Path | None) -> "RunReport":
    from rich.console import Console

    from vasohm.study.journal import JsonLines
    from vasohm.study.progress import PlainLines, ProgressBar
    from vasohm.study.run import run_study

    with ExitStack() as stack:
        listeners: list[Listener] = []
        if log_json is not None:
            try:
                listeners.append(stack.enter_context(JsonLines(log_json)))
            except OSError as fault:
                message = f"cannot be written: {fault.strerror}. Give --log-json a file in a folder that is there."
                raise RequestError([Problem(file=str(log_json), message=message)]) from None
        console = Console(stderr=True)
        if not quiet:
            bar = console.is_terminal
            listeners.append(stack.enter_context(ProgressBar(console)) if bar else PlainLines(_say))
        return run_study(study, request, listeners)


def _study_or_images(
    sources: tuple[Path, ...], only: tuple[str, ...], *, pixel_size: float | None, preset: str
) -> tuple["Study", tuple[str, ...]]:
    """Tell a study file from images; beside a study file and --only, further words are image ids."""
    from vasohm.config.study_file import ad_hoc_study, read_study

    studies = [source for source in sources if source.suffix.lower() == ".toml"]
    others = [source for source in sources if source not in studies]
    problems = []
    if len(studies) > 1:
        problems.append(Problem(file=str(studies[1]), message="is a second study file. Measure one study at a time."))
    if studies and others and not only:
        message = f"stands beside study file {studies[0]}. Name images in its sheet, or leave the study file out."
        problems += [Problem(file=str(other), message=message) for other in others]
    if studies and pixel_size is not None:
        message = f"is for images named on the command line. Write it into {studies[0]} or its sheet."
        problems.append(Problem(file="--pixel-size", value=str(pixel_size), message=message))
    if not studies:
        absent = [other for other in others if not other.exists()]
        problems += [Problem(file=str(other), message="no such file. Check its name and folder.") for other in absent]
    if problems:
        raise RequestError(problems)
    if studies:
        return read_study(studies[0]), (*only, *(str(other) for other in others))
    return ad_hoc_study([other.absolute() for other in others], pixel_size, preset), only


@commands.command()
@_STUDY
def check(study_file: Path) -> int:
    """Read all files of a study, measure nothing, and name every problem at once."""
    from vasohm.config.study_file import read_study
    from vasohm.study.check import problems_of
    from vasohm.study.progress import counted

    study = read_study(study_file)
    for warning in study.warnings:
        _say(warning)
    problems = problems_of(study)
    if problems:
        raise RequestError(problems)
    click.echo(f"{study_file}: {counted(len(study.images), 'image')}, no problem found")
    return EXIT_OK


@commands.command()
@click.argument("out", metavar="DIR", type=_FOLDER)
def gather(out: Path) -> int:
    """Rebuild the tables and the page at the root of DIR from its images and parts."""
    from vasohm.study.gather import gather as gather_folder
    from vasohm.study.progress import gathered_lines

    report = gather_folder(out.absolute())
    for line in gathered_lines(report, out):
        click.echo(line)
    return report.state.exit_status


@commands.command()
@click.argument("results", metavar="DIR", type=_FOLDER)
@click.option(
    "--truth",
    required=True,
    type=_FOLDER,
    help="Folder of phantoms, or of masks that a person drew: IMAGE_ID.png …, nonzero is vessel.",
)
@click.option("--out", type=_FOLDER, help="Folder for the tables and the picture; nothing is written where not given.")
def appraise(results: Path, truth: Path, out: Path | None) -> int:
    """Tell how far what was measured in DIR is from the truth, and what can be trusted."""
    from vasohm.study.appraise import appraise as hold_against_truth
    from vasohm.study.appraise import write_appraisal
    from vasohm.study.appraise_masks import appraise_masks, holds_masks, write_mask_appraisal
    from vasohm.study.certificate import mask_lines, summary_lines

    if holds_masks(truth):
        agreed = appraise_masks(results, truth)
        lines = mask_lines(agreed.table, agreed.notes)
        if out is not None:
            write_mask_appraisal(agreed, out, lines)
        for line in lines:
            click.echo(line)
        return EXIT_OK
    appraisal = hold_against_truth(results, truth)
    if out is not None:
        write_appraisal(appraisal, out)
    for line in summary_lines(appraisal):
        click.echo(line)
    return EXIT_OK


@commands.command(epilog=CAUTION)
@_STUDY
@click.option("--results", required=True, type=_FOLDER, help="Folder that was --out of measure, run to its end.")
@click.option("--out", required=True, type=_FOLDER, help="Folder of its own for tables, plots and page.")
def compare(study_file: Path, results: Path, out: Path) -> int:
    """Compare groups of subjects, or states of the same subjects, as [compare] of the study asks."""
    from vasohm.config.study_file import read_study
    from vasohm.study.comparing import compare_study, write_comparison
    from vasohm.study.comparison_words import summary_lines

    found = compare_study(read_study(study_file), results)
    write_comparison(found, out)
    for line in summary_lines(found.comparison.tables["comparison"], found.comparison.notes):
        click.echo(line)
    click.echo(f"tables, plots and page are in {out}")
    return EXIT_OK


@commands.command()
def laws() -> int:
    """List the laws of apparent viscosity that a study can name: range, source, and values at two radii."""
    from vasohm.flow.rheology import apparent_viscosity, get_law, law_names

    status = EXIT_OK
    for name in law_names():
        try:
            law = get_law(name)
            at_10_um, at_50_um = apparent_viscosity(name, [10.0, 50.0], 0.45, parameters=law.example_parameters)
        except VasohmError as wrong:
            _complain([str(wrong)])
            status = EXIT_SOME_FAILED
            continue
        click.echo(name)
        click.echo(
            "  radius {:g} to {:g} um, hematocrit {:g} to {:g}".format(*law.valid_radius_um, *law.valid_hematocrit)
        )
        click.echo(f"  {law.citation}")
        constants = "".join(f", {key} = {value:g}" for key, value in law.example_parameters.items())
        click.echo(f"  {at_10_um:.4g} mPa.s at a radius of 10 um, {at_50_um:.4g} mPa.s at 50 um{constants}")
    click.echo(
        "Values at a discharge hematocrit of 0.45 and a plasma viscosity of 1.2 mPa.s, which is that at 37 C; at room\n"
        "temperature plasma has 1.5 to 1.7 mPa.s, and viscosity goes with it. Outside its range a law's formula is\n"
        "used all the same, and the segment carries the flag law_range."
    )
    return status


@commands.command()
def columns() -> int:
    """List every column of every table: its type, unit and meaning."""
    from vasohm.results.schema import describe

    table = ""
    for column in describe():
        if column["table"] != table:
            table = column["table"]
            click.echo(f"{table}.csv")
        kind = ", ".join(word for word in (column["type"], column["unit"]) if word)
        click.echo(f"  {column['name']} ({kind}): {column['meaning']}")
    return EXIT_OK


@commands.command()
def about() -> int:
    """Tell versions, the processes that would be used, and which codecs are there."""
    from vasohm.study.about import about as facts

    for name, value in facts():
        click.echo(f"{name}: {value}")
    return EXIT_OK


@commands.command()
@click.argument("recipe_file", metavar="[RECIPE.toml]", required=False, type=click.Path(path_type=Path))
@click.option("--like", type=_FOLDER, help="Make phantoms like the images of these results, instead of a recipe's.")
@click.option("--out", required=True, type=_FOLDER, help="Folder for the images and their truth.")
def phantom(recipe_file: Path | None, like: Path | None, out: Path) -> int:
    """Make images of vessels whose radii, lengths and resistances are known exactly."""
    from vasohm_synthetic.errors import RecipeError
    from vasohm_synthetic.like import recipe_like
    from vasohm_synthetic.make import make_phantoms
    from vasohm_synthetic.recipe import read_recipe

    if (recipe_file is None) == (like is None):
        _complain(["give either a recipe or --like RESULTS_DIR."])
        return EXIT_REQUEST
    try:
        make_phantoms(read_recipe(recipe_file) if recipe_file else recipe_like(like or out), out)
    except RecipeError as wrong:
        _complain(wrong.problems)
        return EXIT_REQUEST
    click.echo(f"phantoms are in {out}")
    return EXIT_OK


def _say(line: str) -> None:
    try:
        click.echo(line, err=True)
    except OSError:  # a full disk or a closed pipe at the other end must not end a run
        _say_no_more(2)


def _say_no_more(descriptor: int) -> None:
    """Let nothing more be written to standard output or error, not even what is flushed at the end."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), descriptor)


def _complain(lines: Iterable[str]) -> None:
    for line in lines:
        _say(f"vasohm: {line}")
