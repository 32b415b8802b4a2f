"""The command line: parses arguments, prints, and leaves the work to `runs`."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

import click

__all__ = ["cli", "main"]

BAD_INPUT, NOT_FINISHED = 2, 3
F = TypeVar("F", bound=Callable[..., Any])


def main() -> None:
    """Run the command line: exit 0 done, 2 bad input, 3 could not finish."""
    from gravbasin.errors import GravbasinError, InputError

    try:
        code = cli(standalone_mode=False)
    except click.ClickException as error:
        error.show()
        code = BAD_INPUT
    except (click.Abort, KeyboardInterrupt):
        click.echo("interrupted; nothing was changed", err=True)
        code = NOT_FINISHED
    except InputError as error:
        click.echo(str(error), err=True)
        code = BAD_INPUT
    except (GravbasinError, MemoryError) as error:
        click.echo(str(error) or "not enough memory; lower model.layers, model.rings or model.draws", err=True)
        code = NOT_FINISHED
    sys.exit(code if isinstance(code, int) else 0)


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="gravbasin")
def cli() -> None:
    """Could an eroded or buried impact structure make this gravity anomaly, and could it be seen at all?

    Start with: gravbasin init --rim-diameter-km 45 --erosion-km 4
    """


def _scenario_options(default_folder: str) -> Callable[[F], F]:
    def decorate(command: F) -> F:
        options = [
            click.argument("scenario", type=click.Path(path_type=Path)),
            click.option(
                "-o",
                "out",
                type=click.Path(path_type=Path),
                default=None,
                help=f"Folder for the results.  [default: SCENARIO's name + {default_folder}]",
            ),
            click.option("--set", "changes", multiple=True, metavar="TABLE.KEY=VALUE", help="Change one field."),
            click.option("--quiet", is_flag=True, help="Print nothing but faults."),
        ]
        for option in reversed(options):
            command = option(command)
        return command

    return decorate


@cli.command(epilog="Example: gravbasin assess configs/demo.toml -o demo_run --set history.erosion_km=1.5")
@_scenario_options("_run")
@click.option("--search", is_flag=True, help="Also rank circular candidates over the whole map.")
def assess(scenario: Path, out: Path | None, changes: tuple[str, ...], quiet: bool, search: bool) -> None:
    """Test a scenario against its map and write a run folder with verdict and report."""
    from gravbasin.runs.assess import assess as run
    from gravbasin.scenario_file import load_scenario, parse_override

    question = load_scenario(scenario, dict(parse_override(text) for text in changes))
    folder = out or Path(f"{scenario.stem}_run")
    with _told(quiet) as progress:
        result = run(question, folder, search=search, progress=progress)
    if quiet:
        return
    verdict = result.verdict
    click.echo(f"{verdict['verdict'].upper()}\n{verdict['statement']}\n")
    click.echo("\n".join(_numbers(verdict)))
    click.echo("\n" + "\n".join(verdict["cautions"]))
    click.echo(f"\nreport: {folder / 'report.html'}")


def _numbers(verdict: dict[str, Any]) -> Iterator[str]:
    model, noise, seen = verdict["model"], verdict["noise"], verdict["detectability"]
    yield f"anomaly     peak {model['peak_mgal']:+.2f} mGal, centre {model['centre_mgal']:+.2f} mGal"
    yield (
        f"noise       {noise['sill_mgal']:.1f} mGal over {noise['range_km']:.0f} km, "
        f"smoothness {noise['smoothness']:.2f}, nugget {noise['nugget_mgal']:.2f} mGal"
    )
    yield (
        f"visible     signal-to-noise {seen['snr']:.1f} ({seen['snr_low']:.1f} to {seen['snr_high']:.1f}), "
        f"detection probability {seen['detection_probability']:.2f} at false alarms {seen['false_alarm_probability']:g}"
    )
    level = seen["vanishing_erosion_km"]
    yield f"vanishes    at {level['median']:.1f} km of erosion ({level['low']:.1f} to {level['high']:.1f} km)"
    if "fit" in verdict:
        fit = verdict["fit"]
        yield (
            f"fit         posterior predictive p = {fit['p_value']:.2g}, "
            f"best chi-square {fit['chi2']:.1f} for {fit['dof']} degrees of freedom"
        )
        impact, *others = verdict["rivals"]
        best = max(others, key=lambda rival: rival["probability"])
        yield (
            f"rivals      {impact['name']} {impact['probability']:.2g}, "
            f"best other: {best['name']} {best['probability']:.2g}"
        )
    if "chance" in verdict:
        chance = verdict["chance"]
        yield (
            f"chance      p = {chance['p_value']:.3g} ± {chance['standard_error']:.2g} "
            f"from {chance['centres']} other places ({chance['source']})"
        )
    for place in verdict.get("search", []):
        yield (
            f"candidate {place['rank']:<2} {place['easting_km']:.1f} km east, {place['northing_km']:.1f} km north, "
            f"log odds {place['log_odds']:+.1f}, search-wide p {place['search_p_value']:.2f}"
        )
    audit = verdict["audit"]
    yield f"audit       {audit['max_abs_difference_mgal']:.1e} mGal from {audit['reference']}"


@cli.command(epilog="Example: gravbasin section configs/fresh_20km.toml -o fresh_20km --set crater.rim_diameter_km=40")
@_scenario_options("_section")
def section(scenario: Path, out: Path | None, changes: tuple[str, ...], quiet: bool) -> None:
    """Describe a scenario's structure: cross-section, anomaly by cause, what erosion takes, sizes with sources."""
    from gravbasin.report.section_page import section_lines
    from gravbasin.runs.section_run import describe_section
    from gravbasin.scenario_file import load_scenario, parse_override

    question = load_scenario(scenario, dict(parse_override(text) for text in changes))
    folder = out or Path(f"{scenario.stem}_section")
    with _told(quiet) as progress:
        described = describe_section(question, folder, progress=progress)
    if not quiet:
        click.echo("\n".join(section_lines(described)))
        click.echo(f"\nreport: {folder / 'report.html'}")


@cli.command(epilog="Example: gravbasin sweep configs/sweep_demo.toml -o sweep_demo --executor dask --workers 2")
@_scenario_options("_sweep")
@click.option(
    "--executor",
    default="serial",
    show_default=True,
    help="serial, threads, dask (workers on this machine), or a dask scheduler's address, tcp://HOST:PORT.",
)
@click.option("--workers", type=click.IntRange(min=1), default=None, help="Threads or local workers.  [default: cores]")
@click.option("--dry-run", is_flag=True, help="Say what it would take, from a measured sample, and stop.")
@click.option("--yes", is_flag=True, help="Go beyond two hours, 4 GiB of memory or 20 GiB on disk.")
def sweep(
    scenario: Path,
    out: Path | None,
    changes: tuple[str, ...],
    quiet: bool,
    executor: str,
    workers: int | None,
    dry_run: bool,
    yes: bool,
) -> None:
    """Compute the what-if cases of a scenario's [sweep] table; the same command continues an interrupted one."""
    from gravbasin.runs.sweep import estimate_sweep
    from gravbasin.runs.sweep import sweep as run
    from gravbasin.scenario_file import load_scenario, parse_override

    question = load_scenario(scenario, dict(parse_override(text) for text in changes))
    folder = out or Path(f"{scenario.stem}_sweep")
    if dry_run:
        click.echo("\n".join(estimate_sweep(question, executor, workers=workers).lines()))
        return
    try:
        with _told(quiet) as progress:
            cases = run(question, folder, executor, workers=workers, yes=yes, progress=progress)
    except KeyboardInterrupt:
        click.echo(f"interrupted; the cases done are kept in {folder}, and the same command continues", err=True)
        sys.exit(NOT_FINISHED)
    if not quiet:
        failed = int((cases.failure != "").sum())
        click.echo(f"{cases.sizes['case']} cases, {failed} of them failed\n\nreport: {folder / 'report.html'}")


@cli.command(epilog="Example: gravbasin init --rim-diameter-km 45 --erosion-km 4 -o starter.toml")
@click.option("--rim-diameter-km", type=float, required=True, help="Final rim diameter before erosion.")
@click.option("--erosion-km", type=float, default=0.0, show_default=True, help="Rock stripped since the impact.")
@click.option("-o", "out", type=click.Path(path_type=Path), default=Path("starter.toml"), show_default=True)
@click.option("--quiet", is_flag=True, help="Print nothing but faults.")
def init(rim_diameter_km: float, erosion_km: float, out: Path, quiet: bool) -> None:
    """Write a commented scenario file to start from."""
    from gravbasin.errors import CannotFinish, InputError
    from gravbasin.runs.store import write_text
    from gravbasin.starter import starter_scenario

    text = starter_scenario(rim_diameter_km, erosion_km)
    if out.exists():
        raise InputError("-o", out, "exists already", "choose another name or remove it")
    try:
        write_text(out, text)
    except OSError as error:
        raise CannotFinish(f"{out}: cannot be written ({error.strerror})") from error
    if not quiet:
        click.echo(f"wrote {out}; run it with: gravbasin assess {out}")


@cli.command(epilog="Example: gravbasin spacing configs/plan_demo.toml -o plan --set survey.costs.budget=60000")
@_scenario_options("_plan")
def spacing(scenario: Path, out: Path | None, changes: tuple[str, ...], quiet: bool) -> None:
    """Plan the survey that would settle it: layouts, spacings, costs, station files."""
    from gravbasin.runs.plan_run import CAUTIONS, plan
    from gravbasin.scenario_file import load_scenario, parse_override

    question = load_scenario(scenario, dict(parse_override(text) for text in changes))
    folder = out or Path(f"{scenario.stem}_plan")
    with _told(quiet) as progress:
        result = plan(question, folder, progress=progress)
    if quiet:
        return
    vanishing = result.vanishing
    click.echo(f"{result.recommendation.outcome.upper()}\n{result.recommendation.statement}\n")
    click.echo(
        f"vanishes    below {vanishing.median:.2g} km of erosion ({vanishing.low:.2g} to {vanishing.high:.2g}) "
        "for these stations"
    )
    click.echo("\n".join(f"rule        {text}" for text in result.rules_judged))
    click.echo("\n" + "\n".join(CAUTIONS))
    click.echo(f"\nstations: {folder / 'stations.csv'}\nreport: {folder / 'report.html'}")


@cli.command(epilog="Example: gravbasin selfcheck")
@click.option("--quick", is_flag=True, help="Coarser bodies and fewer stations.")
@click.option("--quiet", is_flag=True, help="Print nothing but faults.")
def selfcheck(quick: bool, quiet: bool) -> None:
    """Check the engines on this machine against closed forms and harmonica."""
    from gravbasin.forward.selfcheck import run_selfcheck

    checks = run_selfcheck(quick=quick)
    failed = [check for check in checks if not check.passed]
    if not quiet:
        _print_checks(checks)
    if failed:
        click.echo(f"{len(failed)} of {len(checks)} checks failed: {', '.join(c.name for c in failed)}", err=True)
        sys.exit(1)


def _print_checks(checks: Any) -> None:
    width = max(len(check.name) for check in checks)
    click.echo(f"{'check':<{width}}  {'expected':>14} {'obtained':>14} {'difference':>10}")
    for check in checks:
        unit = "" if check.unit == "1" else f" {check.unit}"
        click.echo(
            f"{check.name:<{width}}  {check.expected:>14.7g} {check.obtained:>14.7g} {check.difference:>10.1e}"
            f"{unit}{'' if check.passed else '  FAILED'}"
        )
    passed = sum(check.passed for check in checks)
    click.echo(f"\n{passed} of {len(checks)} checks passed")


@contextmanager
def _told(quiet: bool) -> Iterator[Callable[[str, int, int], None] | None]:
    """Progress on a terminal; nothing under --quiet or into a pipe."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("starting", total=None)
        yield lambda stage, number, count: bar.update(task, description=stage, completed=number, total=count)
