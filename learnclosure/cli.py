"""The command line: arguments in, stages called, progress and results printed."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
from rich.console import Console
from rich.progress import (
    BarColumn,
    Progress,
    ProgressColumn,
    Task,
    TaskID,
    TaskProgressColumn,
    TextColumn,
    TimeElapsedColumn,
    TimeRemainingColumn,
)
from rich.text import Text

from learnclosure import __version__
from learnclosure.errors import CheckFailedError, InputError, LearnclosureError

if TYPE_CHECKING:
    from learnclosure.workflow import Progress as ProgressCall

STUDY = click.argument("study_file", metavar="STUDY", type=click.Path(path_type=Path))
WORKERS = click.option(
    "--workers",
    type=click.IntRange(1, 64),
    default=2,
    show_default=True,
    help="Processes: regions side by side; several share the moments of a single one.",
)
CLUSTER = click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Address of a dask scheduler whose workers sum the moments, as tcp://host:8786.",
)
console = Console(highlight=False)
messages = Console(stderr=True, highlight=False)


class RateColumn(ProgressColumn):
    """How fast a task goes on."""

    def render(self, task: Task) -> Text:
        """Show the share of the task done in a minute."""
        speed = task.finished_speed or task.speed
        return Text("" if speed is None else f"{60.0 * speed:.0%}/min")


@contextmanager
def progress_bars() -> Iterator[ProgressCall]:
    """Draw one bar a task on a terminal; print one line a finished task elsewhere."""
    if not messages.is_terminal:
        finished: set[str] = set()

        def line(task: str, share: float, note: str) -> None:
            if share >= 1.0 and task not in finished:
                finished.add(task)
                messages.print(f"{task}: {note}" if note else task, markup=False)

        yield line
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(bar_width=24),
        TaskProgressColumn(),
        RateColumn(),
        TimeElapsedColumn(),
        TimeRemainingColumn(),
        TextColumn("{task.fields[note]}"),
    )
    with Progress(*columns, console=messages) as bars:
        tasks: dict[str, TaskID] = {}

        def bar(task: str, share: float, note: str) -> None:
            if task not in tasks:
                tasks[task] = bars.add_task(task, total=1.0, note=note)
            bars.update(tasks[task], completed=share, note=note)

        yield bar


def _example(command: str) -> str:
    return f"Example: {command}"


@click.group(
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog=_example("learnclosure run study.toml"),
)
@click.version_option(__version__, prog_name="learnclosure")
def commands() -> None:
    """Turn ensembles of eddy-rich ocean simulations into verified eddy closures.

    Exit codes: 0 done, 1 a check you asked for failed, 2 wrong input.
    """


@commands.command(epilog=_example("learnclosure demo"))
@click.argument("folder", type=click.Path(path_type=Path), default=Path("demo"))
@WORKERS
def demo(folder: Path, workers: int) -> None:
    """Run the whole job on the built-in channel ensembles, in FOLDER."""
    from learnclosure.demonstration import run_demo

    with progress_bars() as progress:
        lines = run_demo(folder, progress=progress, workers=workers)
    for text in lines:
        console.print(text, markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure simulate ensembles --region alder --members 8"))
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--kind",
    type=click.Choice(["channel", "spinning", "plane-wave"]),
    default="channel",
    show_default=True,
    help="Which built-in ensemble.",
)
@click.option("--region", "regions", multiple=True, help="Channel regions; all if not given.")
@click.option("--members", type=click.IntRange(2, 10_000), default=12, show_default=True)
@click.option("--snapshots", type=click.IntRange(1, 100_000), default=40, show_default=True)
@click.option(
    "--spacing",
    type=click.FloatRange(0, min_open=True),
    default=5.0,
    show_default=True,
    help="Days between snapshots of the channel.",
)
@click.option(
    "--fluxes",
    is_flag=True,
    help="Means between snapshots, with tracer fluxes through faces summed over every step.",
)
@click.option("--seed", type=click.IntRange(0), default=0, show_default=True)
@WORKERS
def simulate(
    folder: Path, kind: str, regions: tuple[str, ...], members: int, snapshots: int,
    spacing: float, fluxes: bool, seed: int, workers: int,
) -> None:  # fmt: skip
    """Write built-in ensembles as NetCDF, one file a member, into FOLDER."""
    from learnclosure.demonstration import simulate_kind

    with progress_bars() as progress:
        written = simulate_kind(
            folder, kind, regions=regions, members=members, snapshots=snapshots,
            spacing_days=spacing, fluxes=fluxes, seed=seed, workers=workers, progress=progress,
        )  # fmt: skip
    for path in written:
        console.print(str(path), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure inspect study.toml"))
@click.argument("study_file", metavar="STUDY", type=click.Path(path_type=Path), required=False)
@click.option("--features", is_flag=True, help="List the features a closure may use and stop.")
@click.option(
    "--target-error",
    type=click.FloatRange(0.0, 1.0, min_open=True),
    default=0.2,
    show_default=True,
    help="Relative error of the tensor's trace that members are counted for.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON for other programs.")
def inspect(study_file: Path | None, features: bool, target_error: float, as_json: bool) -> None:
    """Say what was understood of each ensemble, what its diagnosis will cost and promise.

    Everything that keeps the STUDY from running is listed.
    """
    from learnclosure import listing

    if features:
        console.print(listing.feature_listing())
        return
    if study_file is None:
        raise click.UsageError("give a STUDY, or --features")
    from learnclosure.inspection import inspect_study
    from learnclosure.study import read_study

    study = read_study(study_file)
    problems: list[str] = []
    found: list[dict[str, Any]] = []
    for inspection in inspect_study(study, target_error=target_error):
        problems += inspection.readiness.problems
        if as_json:
            found.append(inspection.as_dict())
            continue
        for part in listing.readiness_listing(inspection.readiness, inspection.plan):
            console.print(part)
    if as_json:
        record = {"study": str(study_file), "ready": not problems, "ensembles": found}
        click.echo(json.dumps(record, indent=1, allow_nan=False))
    if problems:
        raise InputError(
            f"the study cannot run: {len(problems)} problem(s), first: {problems[0]}",
            where=study_file,
            remedy="correct what is listed above",
        )
    if not as_json:
        console.print(f"{study_file}: the study can run", markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure diagnose study.toml --workers 2"))
@STUDY
@WORKERS
@CLUSTER
def diagnose(study_file: Path, workers: int, cluster: str | None) -> None:
    """Compute eddy statistics and the transport tensor of every region."""
    from learnclosure.diagnosis.artefact import read_cautions
    from learnclosure.study import read_study
    from learnclosure.workflow import artefacts, diagnose_study

    study = read_study(study_file)
    with progress_bars() as progress:
        diagnose_study(study, progress=progress, workers=workers, cluster=cluster)
    for table in study.ensembles:
        path = artefacts(study).statistics(table.name)
        console.print(str(path), markup=False, soft_wrap=True)
        for said in read_cautions(path):
            console.print(f"  {table.name}: {said}", markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure train study.toml"))
@STUDY
def train(study_file: Path) -> None:
    """Choose and fit one closure for each family."""
    from learnclosure.study import read_study
    from learnclosure.workflow import artefacts, train_study

    study = read_study(study_file)
    with progress_bars() as progress:
        train_study(study, progress=progress)
    for family in study.closure.families:
        console.print(str(artefacts(study).selection(family)), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure evaluate study.toml"))
@STUDY
def evaluate(study_file: Path) -> None:
    """Score the closures beside ceiling and baselines, and audit their constraints."""
    from learnclosure import listing
    from learnclosure.study import read_study
    from learnclosure.workflow import artefacts, evaluate_study

    study = read_study(study_file)
    with progress_bars() as progress:
        record = evaluate_study(study, progress=progress)
    for part in listing.evaluation_listing(record):
        console.print(part)
    console.print(str(artefacts(study).evaluation), markup=False, soft_wrap=True)
    _require_audit(record, artefacts(study).evaluation)


def _require_audit(record: dict[str, object], path: Path) -> None:
    from learnclosure.workflow import failed_checks

    failed = failed_checks(record)
    if failed:
        raise CheckFailedError(
            f"the audit failed: {', '.join(failed)}",
            where=path,
            remedy="do not ship this closure; see the audit table in the report",
        )


@commands.command(epilog=_example("learnclosure export study.toml"))
@STUDY
@click.option("--archive", is_flag=True, help="Write each bundle as one .zip file as well.")
def export(study_file: Path, archive: bool) -> None:
    """Write a verified bundle for each trained family."""
    from learnclosure.delivery import archive_study, export_study
    from learnclosure.study import read_study
    from learnclosure.workflow import artefacts

    study = read_study(study_file)
    with progress_bars() as progress:
        export_study(study, progress=progress)
    places = [artefacts(study).bundle(family) for family in study.closure.families]
    for path in (*places, *(archive_study(study) if archive else ())):
        console.print(str(path), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure report study.toml"))
@STUDY
def report(study_file: Path) -> None:
    """Write the report page."""
    from learnclosure.delivery import report_study
    from learnclosure.study import read_study

    study = read_study(study_file)
    with progress_bars() as progress:
        path = report_study(study, progress=progress)
    console.print(str(path), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure run study.toml"))
@STUDY
@WORKERS
@CLUSTER
def run(study_file: Path, workers: int, cluster: str | None) -> None:
    """Run every stage; stages whose inputs are unchanged are kept."""
    from learnclosure.study import read_study
    from learnclosure.workflow import artefacts, read_json, run_study

    study = read_study(study_file)
    with progress_bars() as progress:
        run_study(study, progress=progress, workers=workers, cluster=cluster)
    places = artefacts(study)
    for family in study.closure.families:
        console.print(str(places.bundle(family)), markup=False, soft_wrap=True)
    console.print(str(places.report), markup=False, soft_wrap=True)
    _require_audit(read_json(places.evaluation, "run the study again"), places.evaluation)


SIGNERS = click.option(
    "--signers",
    type=click.Path(path_type=Path),
    help="File of allowed signers (OpenSSH); the bundle must be signed by one of them.",
)
JSON = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of tables.")


def _print_json(record: object) -> None:
    console.print(json.dumps(record, indent=1), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure verify results/bundle/local-energy"))
@click.argument("bundle", type=click.Path(path_type=Path), required=False)
@click.option("--rules", is_flag=True, help="List the rules a bundle is held to and stop.")
@SIGNERS
@JSON
def verify(bundle: Path | None, rules: bool, signers: Path | None, as_json: bool) -> None:
    """Check a BUNDLE, folder or archive: sums, graph, declared inputs, reference outputs."""
    from learnclosure import listing

    if rules:
        console.print(listing.rule_listing())
        return
    if bundle is None:
        raise click.MissingParameter(param_hint="'BUNDLE'", param_type="argument")
    from learnclosure.export.gate import verify_bundle

    outcome = verify_bundle(bundle, signers=signers)
    if as_json:
        _print_json({"passed": outcome.passed, "checks": [vars(each) for each in outcome.checks]})
    else:
        console.print(listing.verification_listing(outcome))
    failed = [
        f"{check.name} by rule {check.rule}" if check.rule else check.name
        for check in outcome.checks
        if not check.passed
    ]
    if failed:
        raise CheckFailedError(
            f"the bundle failed: {', '.join(failed)}",
            where=bundle,
            remedy="do not load it; ask its author for an intact copy",
        )
    if not as_json:
        console.print(f"{bundle}: verified", markup=False, soft_wrap=True)


@commands.command(
    epilog=_example("learnclosure predict results/bundle/mean-field means.nc tensor.nc")
)
@click.argument("bundle", type=click.Path(path_type=Path))
@click.argument("source", metavar="IN", type=click.Path(path_type=Path))
@click.argument("target", metavar="OUT", type=click.Path(path_type=Path))
@click.option("--single", is_flag=True, help="Run the variant in single precision.")
@SIGNERS
def predict(bundle: Path, source: Path, target: Path, single: bool, signers: Path | None) -> None:
    """Apply a BUNDLE to the mean fields in IN and write the tensor to OUT."""
    from learnclosure.export.predictor import predict_file

    predict_file(bundle, source, target, single=single, signers=signers)
    console.print(str(target), markup=False, soft_wrap=True)


@commands.command(epilog=_example("learnclosure compare old/mean-field new/mean-field"))
@click.argument("first", metavar="A", type=click.Path(path_type=Path))
@click.argument("second", metavar="B", type=click.Path(path_type=Path))
@JSON
def compare(first: Path, second: Path, as_json: bool) -> None:
    """Tell the bundles A and B apart: inputs, ranges, scores, outputs, speed.

    Ends with 0 if they compute and claim the same but for rounding, else with 1; labels such
    as the version, and speed, do not count.
    """
    from learnclosure import listing
    from learnclosure.export.compare import TOPICS, compare_bundles

    comparison = compare_bundles(first, second)
    if as_json:
        _print_json(comparison.as_record())
    else:
        for part in listing.comparison_listing(comparison):
            console.print(part)
    if comparison.differs:
        met = {row.topic for row in comparison.differences}
        topics = [topic for topic in TOPICS if topic in met and topic != "label"]
        raise CheckFailedError(
            f"the bundles differ in {', '.join(f'{topic}s' for topic in topics)}",
            where=f"{first}, {second}",
        )


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and leave with its exit code.

    Parameters
    ----------
    arguments : list of str, optional
        Words after the program's name; those of the process if not given.
    """
    try:
        code = commands.main(args=arguments, prog_name="learnclosure", standalone_mode=False)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except (click.Abort, KeyboardInterrupt):
        messages.print("stopped; give the same command again to go on")
        sys.exit(130)
    except LearnclosureError as error:
        messages.print(f"learnclosure: {error}", markup=False, soft_wrap=True)
        sys.exit(error.exit_code)
    sys.exit(code if isinstance(code, int) else 0)
