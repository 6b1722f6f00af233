"""The command line: arguments, progress and exit codes over `remnantstats.study`.

Rooms are imported inside the commands for start-up time alone: `--help` must not wait for them.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Any

import typer

from .errors import Fault, InputError, RemnantStatsError

__all__ = ["app", "main"]

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="Occurrence of rocky debris around white dwarfs, corrected for sensitivity, carried to planets and missions.",
)

StudyArgument = Annotated[Path, typer.Argument(metavar="STUDY.toml", help="The study file.")]
OutOption = Annotated[Path | None, typer.Option("--out", metavar="DIR", help="Output directory.")]
OutRequired = Annotated[Path, typer.Option("--out", metavar="DIR", help="Output directory.")]
FreshOption = Annotated[bool, typer.Option("--fresh", help="Ignore finished stages of earlier runs.")]
QuickOption = Annotated[bool, typer.Option("--quick", help="A first look by the quick engine; outputs are marked.")]
DebugOption = Annotated[bool, typer.Option("--debug", help="Show the traceback of an error.")]
SchedulerOption = Annotated[
    str | None, typer.Option("--scheduler", metavar="ADDRESS", help="An existing Dask scheduler.")
]

UNRELIABLE = 3


class _Progress:
    """One line a stage, with the seconds it took, on standard error."""

    def __init__(self) -> None:
        self._start = time.perf_counter()
        self._open = False

    def __call__(self, stage: str) -> None:
        self.close()
        print(f"  {stage} …", end="", flush=True, file=sys.stderr)
        self._start, self._open = time.perf_counter(), True

    def close(self) -> None:
        if self._open:
            print(f" {time.perf_counter() - self._start:.1f} s", file=sys.stderr, flush=True)
            self._open = False


def _guarded(action: Callable[[_Progress], int], debug: bool) -> None:
    """Run a command's work and turn errors into the contract's exit codes."""
    progress = _Progress()
    try:
        code = action(progress)
        progress.close()
    except KeyboardInterrupt:
        progress.close()
        print("interrupted; finished stages are kept", file=sys.stderr)
        raise typer.Exit(130) from None
    except RemnantStatsError as error:
        progress.close()
        if debug:
            raise
        print(f"error: {error}", file=sys.stderr)
        raise typer.Exit(error.exit_code) from None
    except Exception as error:
        progress.close()
        if debug:
            raise
        print(
            f"error: a fault of remnantstats, not of your input: {type(error).__name__}: {error}\n"
            "  to do:   run again with --debug and report the traceback",
            file=sys.stderr,
        )
        raise typer.Exit(1) from None
    raise typer.Exit(code)


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Show the version and stop.", is_eager=True)] = False,
) -> None:
    if version:
        import remnantstats

        print(f"remnantstats {remnantstats.__version__}")
        raise typer.Exit(0)


@app.command()
def run(
    study: StudyArgument,
    out: OutOption = None,
    fresh: FreshOption = False,
    quick: QuickOption = False,
    scheduler: SchedulerOption = None,
    debug: DebugOption = False,
) -> None:
    """Do the whole job: read, infer, check, occurrence prior, mission size, report."""

    def action(progress: _Progress) -> int:
        from . import study as pipeline
        from .terminal import show_result

        _no_scheduler(scheduler)
        result = pipeline.run(study, out=out, quick=quick, fresh=fresh, progress=progress)
        progress.close()
        show_result(result)
        return 0 if result.reliable else UNRELIABLE

    _guarded(action, debug)


@app.command()
def infer(
    study: StudyArgument,
    out: OutOption = None,
    fresh: FreshOption = False,
    quick: QuickOption = False,
    debug: DebugOption = False,
) -> None:
    """Stop after inference and its checks."""

    def action(progress: _Progress) -> int:
        from . import study as pipeline
        from .terminal import show_result

        result = pipeline.infer_study(study, out=out, quick=quick, fresh=fresh, progress=progress)
        progress.close()
        show_result(result)
        return 0 if result.reliable else UNRELIABLE

    _guarded(action, debug)


@app.command()
def inspect(study: StudyArgument, debug: DebugOption = False) -> None:
    """Read and validate only: census, depth of the limits, rejected rows."""

    def action(progress: _Progress) -> int:
        from . import study as pipeline
        from .study_file import load_study
        from .terminal import show_sample

        progress("reading the sample")
        loaded = load_study(study)
        sample = pipeline.read_study_sample(loaded)
        for model in loaded.models:
            pipeline.posed(loaded, sample, model)
        progress.close()
        show_sample(loaded, sample)
        return 0

    _guarded(action, debug)


@app.command()
def simulate(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="A model's name or file.")],
    stars: Annotated[int, typer.Option("--stars", min=1, max=10_000_000, help="How many stars.")],
    seed: Annotated[int, typer.Option("--seed", min=0, help="Same seed, same survey.")],
    out: OutRequired,
    design: Annotated[Path | None, typer.Option("--design", metavar="STUDY.toml", help="Design to draw again.")] = None,
    truth: Annotated[Path | None, typer.Option("--truth", metavar="FILE.toml", help="True parameters.")] = None,
    debug: DebugOption = False,
) -> None:
    """Draw a synthetic sample with known truth, in the sample table's format."""

    def action(progress: _Progress) -> int:
        from .calibration import draw_survey, write_survey
        from .fields import read_toml
        from .population import load_model

        progress("drawing")
        given = {} if truth is None else read_toml(truth, "file of true parameters")
        where = "the truth" if truth is None else str(truth)
        survey = draw_survey(load_model(model), stars, seed, design=_design(design), truth=given, where=where)
        progress("writing")
        files = write_survey(survey, out)
        progress.close()
        for path in files:
            print(f"wrote {path}")
        return 0

    _guarded(action, debug)


@app.command()
def calibrate(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="A model's name or file.")],
    out: OutRequired,
    surveys: Annotated[int, typer.Option("--surveys", min=10, help="How many surveys.")] = 100,
    stars: Annotated[int, typer.Option("--stars", min=1, help="Stars in each.")] = 300,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Same seed, same numbers.")] = 1,
    design: Annotated[Path | None, typer.Option("--design", metavar="STUDY.toml", help="Design to draw again.")] = None,
    scheduler: SchedulerOption = None,
    debug: DebugOption = False,
) -> None:
    """Check by simulation that a model's intervals cover as they say."""

    def action(progress: _Progress) -> int:
        from .calibration import calibrate as work
        from .files import write_text
        from .population import load_model
        from .terminal import show_calibration

        _no_scheduler(scheduler)
        progress(f"{surveys} surveys of {stars} stars")
        report = work(load_model(model), surveys=surveys, stars=stars, seed=seed, design=_design(design))
        progress.close()
        write_text(out / "coverage.csv", report.coverage().to_csv(index=False, lineterminator="\n"))
        write_text(out / "ranks.csv", report.ranks.to_csv(index=False, lineterminator="\n"))
        show_calibration(report, out)
        return 0

    _guarded(action, debug)


@app.command()
def size(
    prior: Annotated[Path, typer.Argument(metavar="PRIOR", help="An exported occurrence prior, .json or .nc.")],
    mission: Annotated[Path, typer.Argument(metavar="MISSION.toml", help="A file with a [mission] table.")],
    out: OutRequired,
    debug: DebugOption = False,
) -> None:
    """Size a mission from an exported occurrence prior alone."""

    def action(progress: _Progress) -> int:
        from .mission import load_mission, size_mission, write_mission
        from .occurrence import read_prior
        from .terminal import show_plan

        progress("mission size")
        plan = size_mission(read_prior(prior), load_mission(mission))
        files = write_mission(plan, out)
        progress.close()
        show_plan(plan)
        for path in files:
            print(f"wrote {path}")
        return 0

    _guarded(action, debug)


@app.command()
def models(
    name: Annotated[str | None, typer.Argument(metavar="[NAME]", help="A model to show.")] = None,
    debug: DebugOption = False,
) -> None:
    """List the shipped population models, or show one."""

    def action(progress: _Progress) -> int:
        from .population import load_model, model_names

        if name is None:
            for known in model_names():
                print(f"{known:<18} {load_model(known).file.title}")
        else:
            print(load_model(name).text, end="")
        return 0

    _guarded(action, debug)


def _design(path: Path | None) -> Any:
    """The design of a study, or None."""
    if path is None:
        return None
    from . import study as pipeline
    from .calibration import Design
    from .study_file import load_study

    loaded = load_study(path)
    sample = pipeline.read_study_sample(loaded)
    model = loaded.file.model
    return Design(sample, loaded.channels, model.groups, model.atmospheres, path.name)


def _no_scheduler(address: str | None) -> None:
    if address is not None:
        raise InputError(
            Fault(
                "runs on a cluster are not available in this version",
                where="flag --scheduler",
                found=address,
                allowed="no --scheduler",
                remedy="run on this machine",
            )
        )


def main() -> None:
    """Entry point: usage errors exit with 2, as the contract says."""
    app()


if __name__ == "__main__":
    main()
