"""The verbs of the tool, in the order in which the rooms do their work; no mathematics of their own.

Every verb takes paths and plain numbers and returns a `Result`; the command line prints it. What needs
numba, scipy or matplotlib is imported when a verb runs.
"""

from __future__ import annotations

import shlex
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from roa import stored_run
from roa.errors import Interrupted, MachineError, UserError
from roa.interruption import resumable_by

if TYPE_CHECKING:
    from roa.loop.configuration import Configuration
    from roa.preparation import Preparation
    from roa.report.evidence import Evidence
    from roa.sweep.means import Means
    from roa.sweep.progress import Progress
    from roa.sweep.run_folder import RunFolder


@dataclass(frozen=True)
class Result:
    """What a verb concluded.

    Attributes
    ----------
    text : for people, answer first
    document : for programs, as it stands in `verdict.json` where there is one
    exit_code : 0 done, 1 refuted or in disagreement, 3 not settled, 130 out of time
    folder : where it is written, None where nothing is
    note : what is to be said on standard error whatever is printed, such as how to carry on
    """

    text: str
    document: dict[str, Any] = field(default_factory=dict)
    exit_code: int = 0
    folder: Path | None = None
    note: str = ""


def init(file: str | Path) -> Result:
    """Write a commented configuration to start from; an existing file is left alone."""
    from roa.loop.starter import STARTER

    path = Path(file)
    try:
        with path.open("x", encoding="utf-8") as new:
            new.write(STARTER)
    except FileExistsError:
        raise UserError(f"{path}: exists already and is left as it is; give another name") from None
    except OSError as error:
        raise MachineError(f"{path}: cannot be written ({error.strerror})") from None
    quoted = shlex.quote(str(path))
    return Result(f"{path} is written.\nNext: edit it, then `roa check {quoted}` and `roa run {quoted}`.")


def check(
    config: str | Path, samples: int | None = None, seed: int | None = None, jobs: int | None = None,
    quick: bool = False, progress: Progress | None = None,
) -> Result:  # fmt: skip
    """Say whether a configuration is sound, where it rests, and what its sweep will cost."""
    from roa.basin.reach import foresee
    from roa.report.soundness import soundness_document, soundness_text
    from roa.sweep.cost import forecast
    from roa.sweep.memory import physical_memory
    from roa.sweep.space import free_space, lacking

    prepared = _prepare(config, samples, seed, progress, jobs, quick)
    cost = forecast(prepared.plan, prepared.lanes, jobs)
    reach = foresee(prepared.configuration, prepared.bounds, cost.timed, physical_memory())
    plan, free = prepared.plan, free_space(Path("results"))
    text = soundness_text(plan, cost, reach, free, shlex.quote(str(config)))
    document = soundness_document(plan, cost, reach, free)
    if words := lacking(plan, plan.samples, free):
        note = f"{config}: {words} here; make room, or give --out on another disk"
        return Result(text, document, MachineError.exit_code, note=note)
    return Result(text, document, 3 if reach and reach.obstacles else 0)


def run(
    config: str | Path, out: str | Path | None = None, jobs: int | None = None, samples: int | None = None,
    seed: int | None = None, hours: float | None = None, executor: str | None = None,
    quick: bool = False, progress: Progress | None = None, command: str = "roa.run",
) -> Result:  # fmt: skip
    """Do the whole job: bound, sweep, comparison, figures, report, verdict."""
    from roa.sweep.means import Means

    means = Means.granted(jobs, hours, executor, command)
    return _swept(config, out, samples, seed, means, quick, progress, figures=True)


def sweep(
    config: str | Path, out: str | Path | None = None, jobs: int | None = None, samples: int | None = None,
    seed: int | None = None, hours: float | None = None, executor: str | None = None,
    quick: bool = False, progress: Progress | None = None, command: str = "roa.sweep",
) -> Result:  # fmt: skip
    """Do the simulation alone, with its counts and the bounds that it took its target set from."""
    from roa.sweep.means import Means

    means = Means.granted(jobs, hours, executor, command)
    return _swept(config, out, samples, seed, means, quick, progress, figures=False)


def resume(
    run: str | Path, samples: int | None = None, jobs: int | None = None, hours: float | None = None,
    executor: str | None = None, progress: Progress | None = None,
    command: str = "roa.resume",
) -> Result:  # fmt: skip
    """Carry on a sweep that stopped, or extend one that is done, then conclude it as `run` does."""
    from roa.sweep.finished import is_done
    from roa.sweep.means import Means

    means = Means.granted(jobs, hours, executor, command)
    with resumable_by(f"roa resume {shlex.quote(str(run))}"):
        was_done = is_done(stored_run.existing(run), samples)
        prepared, folder = stored_run.prepare_again(run, samples, progress, jobs=jobs)
        result = _launched(prepared, folder, means, progress, figures=True)
    note = "the sweep was done already and is left as it is; concluded again from what is stored"
    return replace(result, note=note) if was_done else result


def status(run: str | Path) -> Result:
    """Say how far a sweep is, from its folder alone; the writer does not notice."""
    from roa.loop.read import read_text
    from roa.report.status_text import status_document, status_text
    from roa.sweep.status import read_status

    folder = stored_run.existing(run)
    found = read_status(folder)
    confidence = read_text(found.header.config, str(folder.config)).verdict.confidence
    text = status_text(found, confidence, str(folder.path), folder.resume_command)
    return Result(text, status_document(found, confidence), 0, folder.path)


def bound(
    config: str | Path, out: str | Path | None = None, seed: int | None = None, jobs: int | None = None,
    quick: bool = False,
    progress: Progress | None = None, command: str = "roa.bound",
) -> Result:  # fmt: skip
    """Derive the analytic estimates alone, without a simulation."""
    from roa.basin.provenance import provenance
    from roa.basin.verdict import conclude

    folder = _new_folder(config, out)
    prepared = _prepare(config, None, seed, progress, jobs, quick)
    verdict = conclude(
        prepared.configuration, prepared.equilibrium, prepared.all_bounds, provenance(command, prepared.seed, jobs=jobs)
    )
    return _written(prepared.configuration, verdict, folder, 0)


def validate(
    config: str | Path, out: str | Path | None = None, seed: int | None = None, jobs: int | None = None,
    quick: bool = False,
    progress: Progress | None = None, command: str = "roa.validate",
) -> Result:  # fmt: skip
    """Judge the claimed bound: prove it, break it, or say how far it is supported."""
    from roa.basin.provenance import provenance
    from roa.basin.verdict import conclude, exit_code

    folder = _new_folder(config, out)
    prepared = _prepare(config, None, seed, progress, jobs, quick)
    configuration = prepared.configuration
    if configuration.bound.claimed_level is None:
        raise UserError(
            f"{configuration.source}: [bound]: there is no claim to validate; write `level = c` for the set V <= c, "
            "or `ball = r` for a ball about the equilibrium"
        )
    claim = prepared.claim()
    verdict = conclude(
        configuration,
        prepared.equilibrium,
        prepared.bounds,
        provenance(command, prepared.seed, jobs=jobs),
        target=prepared.target,
        claim=claim,
        integration=prepared.choice.document,
    )
    return _written(configuration, verdict, folder, exit_code(claim, configuration.verdict.accept))


def replay(
    source: str | Path, index: int | None = None, start: str | None = None, audit: int | None = None,
    jobs: int | None = None, progress: Progress | None = None,
) -> Result:  # fmt: skip
    """Integrate starts again by an independent integrator: a stored one or several, or any start of a configuration.

    Parameters
    ----------
    source : a run folder with `index`, or a configuration with `start`
    start : "state=value,…" for every state
    audit : number of stored starts, half of them drawn at random and half near the edge of the basin
    """
    if audit is not None:
        return _audit(source, audit, progress, jobs)
    from roa.basin.replay import replay as replay_stored
    from roa.basin.replay import replay_start
    from roa.report.replay_text import replay_document, replay_text

    if index is not None:
        prepared, folder = stored_run.prepare_again(source, None, progress, jobs=jobs)
        samples = stored_run.samples_of(folder)
        if not 0 <= index < samples.n:
            raise UserError(f"{source}: has no sample {index}; it holds 0 to {samples.n - 1}")
        found = replay_stored(samples, index, prepared.configuration.loop, prepared.target, prepared.integration)
    else:
        prepared = _prepare(source, None, None, progress, jobs)
        point = _start_of(prepared.configuration, start or "")
        found = replay_start(
            point, prepared.simulate, prepared.configuration.loop, prepared.target, prepared.integration
        )
    loop = prepared.configuration.loop
    return Result(replay_text(found, loop), replay_document(found, loop), 0 if found.agrees else 1)


def _audit(run: str | Path, count: int, progress: Progress | None, jobs: int | None) -> Result:
    from roa.basin.audit import audit
    from roa.report.replay_text import audit_document, audit_text

    prepared, folder = stored_run.prepare_again(run, None, progress, jobs=jobs)
    configuration = prepared.configuration
    found = audit(
        stored_run.samples_of(folder), configuration.loop, prepared.target, prepared.integration, count, prepared.seed,
        configuration.verdict.confidence,
    )  # fmt: skip
    return Result(audit_text(found), audit_document(found), 1 if found.disagreements else 0)


def overlay(
    run: str | Path, other: str | Path | None = None, states: str | None = None, at: str | None = None,
    only: str | None = None, formats: str | None = None, dpi: int | None = None, rising: bool = False,
    jobs: int | None = None, progress: Progress | None = None,
) -> Result:  # fmt: skip
    """Draw the figures of a run again, from what is stored; or two runs in one picture.

    Parameters
    ----------
    run : its folder, into which the figures go
    other : a second run, whose basin is drawn against that of the first
    states : "a,b", the pair of states that is shown
    at : "state=value,…", where other states are held
    only : "name,…", the figures that are wanted
    formats : "png,svg,pdf" or a part of it
    dpi : dots an inch of what consists of pixels
    rising : whether the region with V̇ >= 0 is hatched
    """
    from roa.report.draw import draw_difference, draw_figures
    from roa.report.save import read_formats
    from roa.report.view import read_view

    first = evidence(run, progress, jobs)
    view = read_view(first.loop, states, at, rising)
    seen = first.seen(view.pair, view.at(first.equilibrium), rising)
    folder, kinds = stored_run.existing(run), read_formats(formats)
    if other is not None:
        names = stored_run.existing(run).path.name, stored_run.existing(other).path.name
        files = draw_difference(folder.figures, seen, evidence(other, progress, jobs), names, kinds, dpi)
    else:
        wanted = [name.strip() for name in only.split(",")] if only else []
        files = draw_figures(folder.figures, seen, wanted, kinds, dpi, view.suffix(first.loop))
    return Result("\n".join(str(file) for file in files), {"figures": [str(file) for file in files]}, 0, folder.path)


def evidence(run: str | Path, progress: Progress | None = None, jobs: int | None = None) -> Evidence:
    """Open a run for its figures: `roa.report.figures` holds the functions that draw it into axes of your own."""
    folder = stored_run.existing(run)
    verdict = stored_run.verdict_of(folder)
    prepared = stored_run.prepare_again(run, None, progress, with_target=True, jobs=jobs)[0]
    return prepared.evidence(verdict, stored_run.samples_of(folder))


def report(run: str | Path) -> Result:
    """Write the report of a run again, from what is stored."""
    from roa.report.html import write_report

    folder = stored_run.existing(run)
    stored_run.verdict_of(folder)
    write_report(folder)
    return Result(str(folder.report), {"report": str(folder.report)}, 0, folder.path)


def _prepare(
    config: str | Path,
    samples: int | None,
    seed: int | None,
    progress: Progress | None,
    jobs: int | None = None,
    quick: bool = False,
) -> Preparation:
    from roa.loop.read import read
    from roa.preparation import Preparation

    return Preparation(read(Path(config)), samples, seed, progress, jobs=jobs, quick=quick)


def _swept(
    config: str | Path, out: str | Path | None, samples: int | None, seed: int | None, means: Means,
    quick: bool, progress: Progress | None, figures: bool,
) -> Result:  # fmt: skip
    folder = _new_folder(config, out)
    prepared = _prepare(config, samples, seed, progress, means.jobs, quick)
    return _launched(prepared, folder, means, progress, figures)


def _launched(
    prepared: Preparation, folder: RunFolder, means: Means, progress: Progress | None, figures: bool
) -> Result:
    """Sweep what is missing and conclude; where the time ran out, what is done, as a partial sweep."""
    from roa.sweep.launch import launch

    plan = prepared.plan
    with resumable_by(folder.resume_command), folder.locked():
        complete = launch(plan, folder, means, progress)
        result = _conclude(prepared, folder, means.command, means.jobs, figures)
    if complete:
        return result
    note = f"the granted time is over and the sweep partial; carry on with `{folder.resume_command}`"
    return replace(result, exit_code=Interrupted.exit_code, note=note)


def _conclude(prepared: Preparation, folder: RunFolder, command: str, jobs: int | None, figures: bool) -> Result:
    """Judge what the folder holds; write verdict, figures and report."""
    from roa.basin.provenance import provenance
    from roa.basin.sensitivity import sensitivity
    from roa.basin.verdict import conclude, exit_code
    from roa.report.draw import draw_figures
    from roa.report.html import write_report

    samples, plan = stored_run.samples_of(folder), prepared.plan
    claim = prepared.claim()
    verdict = conclude(
        prepared.configuration,
        prepared.equilibrium,
        prepared.all_bounds if figures else prepared.bounds,
        provenance(command, prepared.seed, samples.n, jobs, plan.fingerprint),
        target=prepared.target,
        samples=samples,
        claim=claim,
        integration=plan.choice.document,
        findings=prepared.findings(samples),
        sensitive=sensitivity(samples, prepared.simulate_tighter, prepared.configuration.verdict.confidence),
    )
    stored_run.write_verdict(folder, verdict)
    if figures:
        draw_figures(folder.figures, prepared.evidence(verdict, samples))
        write_report(folder)
    return _result(folder, verdict, exit_code(claim, prepared.configuration.verdict.accept))


def _new_folder(config: str | Path, out: str | Path | None) -> RunFolder:
    """Return the folder for a new run; asked for first, so that nothing is worked out in vain."""
    from roa.sweep.run_folder import RunFolder

    return RunFolder.new(None if out is None else Path(out), str(config))


def _written(configuration: Configuration, verdict: dict[str, Any], folder: RunFolder, code: int) -> Result:
    """Write the verdict of a command without a sweep into a folder of its own."""
    from roa.sweep.run_folder import write_atomically

    with folder.locked():
        write_atomically(folder.config, configuration.text.encode())
        stored_run.write_verdict(folder, verdict)
    return _result(folder, verdict, code)


def _result(folder: RunFolder, verdict: dict[str, Any], code: int) -> Result:
    from roa.report.summary import summary

    names = [folder.sweep, folder.verdict, folder.report, folder.figures]
    files = [path.name + ("/" if path.is_dir() else "") for path in names if path.exists()]
    return Result(summary(verdict, files, str(folder.path)), verdict, code, folder.path)


def _start_of(configuration: Configuration, text: str) -> Any:
    """Read "state=value,…" into a start, float64 (n,)."""
    import numpy as np

    states = configuration.loop.states
    accepted = ",".join(f"{name}=…" for name in states)
    values: dict[str, float] = {}
    for part in text.split(","):
        name, equals, number = part.partition("=")
        try:
            values[name.strip()] = float(number)
        except ValueError:
            raise UserError(
                f"--from: found {part.strip()!r}; give a number for every state: --from {accepted}"
            ) from None
        if not equals or name.strip() not in states or not np.isfinite(values[name.strip()]):
            raise UserError(f"--from: found {part.strip()!r}; give a number for every state: --from {accepted}")
    missing = [name for name in states if name not in values]
    if missing:
        raise UserError(f"--from: {', '.join(missing)} missing; give a number for every state: --from {accepted}")
    return np.array([values[name] for name in states])
