"""The pipeline: from a study file to every output."""

from __future__ import annotations

import hashlib
import json
import platform
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass, field, replace
from html import escape
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from .catalog import Sample, read_sample
from .errors import Fault, InputError
from .files import atomic_path, make_folder, write_text
from .inference import Fit, fit_problem
from .inference.compare import Comparison, compare
from .mission import MissionSize, size_mission, write_mission
from .occurrence import OccurrencePrior, TransferSettings, occurrence_prior, write_prior
from .population import PopulationModel, Problem, pose
from .stages import StageStore
from .study_file import Study, load_study

__all__ = ["RunResult", "infer_study", "read_study_sample", "run"]

Progress = Callable[[str], None]

#: libraries whose versions decide a result
_LIBRARIES = ("numpy", "scipy", "pandas", "xarray", "pymc", "pytensor", "nutpie", "arviz-stats", "astropy", "lifelines")


@dataclass(frozen=True, repr=False)
class RunResult:
    """What a run gave.

    Attributes
    ----------
    study : Study
    sample : Sample
    fits : tuple of Fit
        One a model, in the order of the study.
    prior : OccurrencePrior or None
    plan : MissionSize or None
    folder : pathlib.Path
        Where the outputs are.
    files : tuple of pathlib.Path
    seconds : dict of str to float
    comparison : Comparison or None
        Where the study names several models.
    """

    study: Study
    sample: Sample
    fits: tuple[Fit, ...]
    prior: OccurrencePrior | None
    plan: MissionSize | None
    folder: Path
    files: tuple[Path, ...] = ()
    seconds: dict[str, float] = field(default_factory=dict)
    comparison: Comparison | None = None

    @property
    def fit(self) -> Fit:
        """The fit of the model that the study names first."""
        return self.fits[0]

    @property
    def reliable(self) -> bool:
        """Whether every check of the leading fit passed or only warned."""
        return self.fit.verdict != "fail"

    @property
    def marks(self) -> tuple[str, ...]:
        """What every output carries."""
        further = self.prior.marks if self.prior is not None else ()
        return tuple(dict.fromkeys([*self.fit.marks, *further]))

    def __repr__(self) -> str:
        parts = [f"RunResult of '{self.study.file.title}'", repr(self.fit)]
        parts += [repr(item) for item in (self.prior, self.plan) if item is not None]
        return "\n".join([*parts, f"outputs in {self.folder}"])

    def _repr_html_(self) -> str:
        parts = [item._repr_html_() for item in (self.fit, self.prior, self.plan) if item is not None]
        return f"<h3>{escape(self.study.file.title)}</h3>" + "".join(parts)


@dataclass(frozen=True)
class _Kept:
    """The draws of one fit in a store of finished stages."""

    store: StageStore
    key: str

    def load(self) -> dict[str, npt.NDArray[Any]] | None:
        return self.store.load(self.key)

    def save(self, arrays: dict[str, npt.NDArray[Any]]) -> None:
        self.store.save(self.key, arrays)


def read_study_sample(study: Study) -> Sample:
    """Read the sample of a study, checked by the study's own rules.

    Parameters
    ----------
    study : Study

    Returns
    -------
    Sample

    Raises
    ------
    InputError
        With every fault of the tables.
    """
    return read_sample(study.file.sample, rules=study.rules, folder=study.folder)


def posed(study: Study, sample: Sample, model: PopulationModel) -> Problem:
    """Pose one of the study's models on its sample."""
    settings = study.file.model
    return pose(model, sample, study.channels, settings.groups, settings.atmospheres, study.recoveries)


def infer_study(
    path: str | Path | Study,
    *,
    out: str | Path | None = None,
    quick: bool = False,
    fresh: bool = False,
    progress: Progress | None = None,
) -> RunResult:
    """Read, infer and check; write the fit's own files.

    Parameters
    ----------
    path : path or Study
    out : path, optional
        Output directory, instead of the study's.
    quick : bool
        A first look by the quick engine.
    fresh : bool
        Ignore draws of earlier runs.
    progress : callable, optional
        Called with the name of each stage.

    Returns
    -------
    RunResult

    Raises
    ------
    InputError
        Where study or sample are wrong; nothing is written then.
    """
    say = progress or (lambda _: None)
    start = time.perf_counter()
    study = path if isinstance(path, Study) else load_study(path)
    say("reading the sample")
    sample = read_study_sample(study)
    problems = [posed(study, sample, model) for model in study.models]
    folder = Path(out) if out is not None else study.output
    seconds = {"reading": time.perf_counter() - start}
    make_folder(folder)
    store = StageStore(folder / ".stages", fresh)
    fits = tuple(_fit(study, sample, problem, store, quick, say) for problem in problems)
    for name, spent in fits[0].timings.items():
        seconds[name] = spent
    comparison = None
    if len(fits) > 1:
        say("comparison of models")
        comparison = compare(fits, study.file.seed)
    result = RunResult(study, sample, fits, None, None, folder, (), seconds, comparison)
    return replace(result, files=tuple(_write_fit(result)))


def _fit(study: Study, sample: Sample, problem: Problem, store: StageStore, quick: bool, say: Progress) -> Fit:
    prefix = f"{problem.model.name}: " if len(study.models) > 1 else ""
    parts = {item.path: item.sha256 for item in sample.sources}
    parts |= {"engine": "quick" if quick else "full", **_versions()}
    key = study.fingerprint(problem.model, parts)
    return fit_problem(
        problem,
        study.file.seed,
        quick=quick,
        thresholds=study.thresholds,
        progress=lambda stage: say(prefix + stage),
        memory=_Kept(store, key),
    )


def run(
    path: str | Path | Study,
    *,
    out: str | Path | None = None,
    quick: bool = False,
    fresh: bool = False,
    progress: Progress | None = None,
) -> RunResult:
    """Do the whole job of a study.

    Parameters
    ----------
    path : path or Study
        The study file.
    out : path, optional
        Output directory, instead of the study's.
    quick : bool
        A first look by the quick engine; every output is marked.
    fresh : bool
        Ignore draws of earlier runs.
    progress : callable, optional
        Called with the name of each stage.

    Returns
    -------
    RunResult

    Raises
    ------
    InputError
        Where study or sample are wrong; nothing is written then.
    """
    say = progress or (lambda _: None)
    done = infer_study(path, out=out, quick=quick, fresh=fresh, progress=progress)
    study, folder, files, seconds = done.study, done.folder, list(done.files), dict(done.seconds)
    prior = plan = None
    start = time.perf_counter()
    if study.transfer is not None:
        say("occurrence prior")
        prior = _occurrence(done, study.transfer)
        files += write_prior(prior, folder, done.fit.marks)
        seconds["occurrence prior"] = time.perf_counter() - start
    if study.mission is not None and prior is not None:
        start = time.perf_counter()
        say("mission size")
        plan = size_mission(prior, study.mission)
        files += write_mission(plan, folder, done.fit.marks)
        seconds["mission size"] = time.perf_counter() - start
    say("report")
    start = time.perf_counter()
    result = replace(done, prior=prior, plan=plan, files=tuple(files), seconds=seconds)
    files.append(_write_report(result))
    seconds["report"] = time.perf_counter() - start
    _write_record(result)
    return replace(result, files=tuple(files))


def _occurrence(done: RunResult, transfer: TransferSettings) -> OccurrencePrior:
    """Carry the leading model's fraction, or the stacked one where the study asks for it."""
    seed = done.study.file.seed
    if not done.study.file.model.stacking or done.comparison is None:
        return occurrence_prior(done.fit, transfer, seed=seed)
    priors = {str(fit.fraction_prior) for fit in done.fits}
    if len(priors) > 1 or transfer.at:
        raise InputError(
            Fault(
                "stacked fractions can be carried on only where the models share one prior of the fraction",
                where=f"{done.study.path}, key 'model.stacking'",
                found="; ".join(sorted(priors)) + ("; 'transfer.at' given" if transfer.at else ""),
                allowed="models without groups and with the same prior, at their reference covariates",
                remedy="set stacking = false, or give the models the same prior under [model.priors]",
            )
        )
    weights = ", ".join(f"{name} {weight:.2f}" for name, weight in done.comparison.weights.items())
    return occurrence_prior(
        done.comparison.fraction,
        transfer,
        fraction_prior=done.fit.fraction_prior,
        seed=seed,
        reference=f"{done.fit.fraction}, models averaged by stacking ({weights})",
    )


def _write_fit(result: RunResult) -> list[Path]:
    fit, folder = result.fit, result.folder
    files = [
        _write_table(_marked(fit.summary(), fit.marks), folder / "summary.csv"),
        _write_table(_marked(fit.stars, fit.marks), folder / "stars.csv"),
        _write_table(_marked(fit.completeness, fit.marks), folder / "completeness.csv"),
    ]
    with atomic_path(folder / "posterior.nc") as temporary:
        tree = fit.posterior.copy()
        tree.attrs["marks"] = "; ".join(fit.marks)
        tree.to_netcdf(temporary, engine="h5netcdf")
    files.append(folder / "posterior.nc")
    if result.comparison is not None:
        files.append(_write_table(_marked(result.comparison.table, fit.marks), folder / "comparison.csv"))
    if len(result.sample.rejected):
        files.append(_write_table(result.sample.rejected, folder / "rejected_rows.csv"))
    files.append(_write_record(result))
    return files


def _marked(table: pd.DataFrame, marks: tuple[str, ...]) -> pd.DataFrame:
    return table.assign(mark="; ".join(marks)) if marks else table


def _write_table(table: pd.DataFrame, path: Path) -> Path:
    write_text(path, table.to_csv(index=False, lineterminator="\n"))
    return path


def _write_report(result: RunResult) -> Path:
    # imported here for start-up time alone: this loads matplotlib
    from .report import ReportContents, write_report

    study = result.study
    contents = ReportContents(
        title=study.file.title,
        fit=result.fit,
        prior=result.prior,
        plan=result.plan,
        thresholds=study.thresholds,
        channels=study.channels,
        provenance=_provenance(result),
        marks=result.marks,
        transfer=study.transfer,
        comparison=result.comparison,
        fits=result.fits,
        stacked=study.file.model.stacking and result.comparison is not None,
    )
    return write_report(contents, result.folder)


def _provenance(result: RunResult) -> dict[str, str]:
    study = result.study
    found = {"study file": f"{study.path.name}, sha256 {_hash(study.path)}"}
    found |= {f"table {item.path}": f"{item.n_rows} rows, sha256 {item.sha256}" for item in result.sample.sources}
    found["seed"] = str(study.file.seed)
    return found | _versions()


def _hash(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest() if path.is_file() else "not a file"


def _versions() -> dict[str, str]:
    found = {"remnantstats": version("remnantstats"), "python": platform.python_version()}
    return found | {name: version(name) for name in _LIBRARIES}


def _write_record(result: RunResult) -> Path:
    """Write run.json: inputs, versions, seed, timings, checks."""
    study = result.study
    record = {
        "schema_version": 1,
        "title": study.file.title,
        "study": {"file": study.path.name, "sha256": _hash(study.path)},
        "tables": [asdict(item) for item in result.sample.sources],
        "models": [{"name": fit.model.name, "priors": _priors(fit)} for fit in result.fits],
        "seed": study.file.seed,
        "engine": result.fit.engine,
        "versions": _versions(),
        "seconds": {name: round(spent, 3) for name, spent in result.seconds.items()},
        "verdict": result.fit.verdict,
        "marks": list(result.marks),
        "checks": [_plain(asdict(check)) for check in result.fit.checks],
        "notes": list(result.fit.notes),
        "compression": None,
        "rejected_rows": len(result.sample.rejected),
    }
    path = result.folder / "run.json"
    write_text(path, json.dumps(record, indent=1, ensure_ascii=False) + "\n")
    return path


def _plain(check: dict[str, Any]) -> dict[str, Any]:
    """JSON has no word for a number that is none."""
    value = float(check["value"])
    return {**check, "value": value if np.isfinite(value) else None}


def _priors(fit: Fit) -> dict[str, Any]:
    return {item.name: item.prior.model_dump(mode="json", by_alias=True) for item in fit.problem.parameters}

