"""The report: one file of HTML that needs nothing else, with the pictures inside."""

from __future__ import annotations

import json
from base64 import b64encode
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined, select_autoescape

from roa.kernel.outcomes import Reason
from roa.loop.configuration import Configuration
from roa.loop.read import read_text
from roa.report import figures
from roa.report.answer import Verdict, answer, next_steps
from roa.report.findings import (
    attractor_rows,
    audit_limit,
    audit_sentence,
    bracket_sentence,
    found_starts,
    safe_sentence,
    sensitivity_sentence,
    slack_sentence,
)
from roa.report.tables import bound_rows, outcome_rows
from roa.report.wording import (
    confidence_text,
    interval_percent,
    level_text,
    number,
    percent,
    percent_upper,
    point_text,
)
from roa.sweep.run_folder import RunFolder, write_atomically


@dataclass(frozen=True)
class Picture:
    """A figure inside the report: where it is from, what it shows, and the same for those who cannot see it."""

    source: str
    caption: str
    alternative: str


def write_report(folder: RunFolder) -> None:
    """Write `report.html` from what the run folder holds: configuration, verdict and figures."""
    verdict = json.loads(folder.verdict.read_text(encoding="utf-8"))
    configuration = read_text(folder.config.read_text(encoding="utf-8"), folder.config.name)
    drawn = {file.stem: file.read_bytes() for file in sorted(folder.figures.glob("*.svg"))}
    write_atomically(folder.report, report_html(verdict, configuration, drawn).encode())


def report_html(verdict: Verdict, configuration: Configuration, drawn: Mapping[str, bytes]) -> str:
    """The whole report as text.

    Parameters
    ----------
    verdict : as in `verdict.json`
    configuration : that of the run
    drawn : content of the SVG files by name, as `draw_figures` writes them; other views of the run are left out
    """
    environment = Environment(
        loader=PackageLoader("roa.report", "."),
        autoescape=select_autoescape(default=True, default_for_string=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    pictures = {name: _picture(name, drawn[name], verdict) for name in figures.names() if name in drawn}
    return environment.get_template("report.html").render(
        verdict=verdict,
        answer=answer(verdict),
        next_steps=next_steps(verdict),
        overlay=pictures.get("overlay") or pictures.get("slices"),
        pictures=pictures,
        bounds=bound_rows(verdict),
        bracket=[one for one in (bracket_sentence(verdict), slack_sentence(verdict)) if one],
        attractors=attractor_rows(verdict),
        found_starts=found_starts(verdict),
        outcome_notes=[one for one in (safe_sentence(verdict), sensitivity_sentence(verdict)) if one],
        audit=[one for one in (audit_sentence(verdict), audit_limit(verdict)) if one],
        outcomes=outcome_rows(verdict),
        basin_rows=list(_basin_rows(verdict)),
        claim_rows=list(_claim_rows(verdict)),
        method_rows=list(_method_rows(verdict, configuration)),
        loop_rows=list(_loop_rows(verdict)),
        matrices=_matrices(verdict),
        provenance_rows=list(_flat(verdict["provenance"])),
        configuration=configuration.text,
    )


def _picture(name: str, content: bytes, verdict: Verdict) -> Picture:
    caption = figures.load(name).CAPTION
    sets = "; ".join(f"{one.name} ({one.strength}) at level {one.level}" for one in bound_rows(verdict))
    text = f"{caption} States: {', '.join(verdict['states'])}. Level sets: {sets or 'none'}."
    if verdict["basin"] and verdict["basin"]["fraction"] is not None:
        text += f" The basin fills {percent(verdict['basin']['fraction'])} of the domain (simulated)."
    # As an image of its own, so that names inside one drawing cannot meet those inside another.
    return Picture(f"data:image/svg+xml;base64,{b64encode(content).decode()}", caption, text)


Row = tuple[str, str]


def _basin_rows(verdict: Verdict) -> Iterator[Row]:
    basin = verdict["basin"]
    if not basin:
        return
    if basin["fraction"] is None:
        yield "share of the domain", f"not known: {basin['refusal']}"
    else:
        yield from _size_rows(basin)
    of_all = f" of {basin['samples_wanted']:,}, a partial sweep" if basin["partial"] else ""
    yield "starts", f"{basin['samples']:,}{of_all}"
    for word, count in basin["reasons"].items():
        yield word.replace("_", " "), f"{count:,} starts (simulated): {Reason[word.upper()].sentence}"


def _size_rows(basin: Verdict) -> Iterator[Row]:
    interval = interval_percent(*basin["interval"])
    yield "share of the domain", f"{percent(basin['fraction'], 2)} (simulated)"
    yield f"{confidence_text(basin['confidence'])} interval", f"{interval} (simulated; {basin['interval_method']})"
    low, high = (number(end, 6) for end in basin["volume_interval"])
    volume = f"{number(basin['volume'], 6)} ({low} to {high}) {basin['volume_unit']}"
    yield "volume, in units of the states", f"{volume} (simulated)"


def _claim_rows(verdict: Verdict) -> Iterator[Row]:
    claim = verdict["claim"]
    if not claim:
        return
    states, units = verdict["states"], verdict["units"]
    yield "result", claim["result"].replace("_", " ")
    yield "claimed set", f"V ≤ {claim['level']:.12g}, its connected part about the equilibrium"
    yield "V̇ < 0 on the set", claim["decrease"]
    yield "reason", claim["reason"]
    if found := claim["counterexample"]:
        yield "counterexample", f"{point_text(states, found['initial'], units)} (simulated)"
        yield "its outcome", f"{found['outcome'].replace('_', ' ')} after {number(found['time'])} s (simulated)"
        yield "see it again", found["replay"]
    if claim["witness"]:
        yield "V̇ > 0 at", f"{point_text(states, claim['witness'], units)} (proved)"
    if claim["largest_level_inside"] is not None:
        yield "largest level inside the domain", f"{level_text(claim['largest_level_inside'])} (estimated)"
    if claim["nonconverging_fraction_upper"] is not None:
        limit = percent_upper(claim["nonconverging_fraction_upper"])
        draws = f"{claim['draws']:,} independent draws, {claim['failures']:,} of which did not converge"
        yield (
            "part that does not converge",
            f"at most {limit} at {confidence_text(claim['confidence'])} (supported; {draws})",
        )


def _loop_rows(verdict: Verdict) -> Iterator[Row]:
    columns = (verdict[key] for key in ("states", "units", "domain", "equilibrium"))
    for name, unit, (low, high), x in zip(*columns, strict=True):
        yield name, f"{number(low)} to {number(high)} {unit}, equilibrium at {number(x, 6)} {unit}"
    eigenvalues = ", ".join(_complex(real, imaginary) for real, imaginary in verdict["eigenvalues"])
    yield "eigenvalues there", f"{eigenvalues} 1/s ({verdict['stability']}, estimated)"


def _method_rows(verdict: Verdict, configuration: Configuration) -> Iterator[Row]:
    sweep = configuration.sweep
    seed = verdict["provenance"].get("seed", sweep.seed)
    uneven = verdict["basin"] and not verdict["basin"]["by_replicate"]["samples"]
    spread = "drawn in rounds from the results of earlier ones" if uneven else "uniform over the domain"
    yield "initial conditions", f"design {sweep.design}, seed {seed}, {spread}"
    chosen = verdict.get("integration")
    method = f"{chosen['method']} ({chosen['why']})" if chosen else sweep.method
    yield "integration", f"method {method}, rtol {sweep.rtol:g}, atol {sweep.atol:g} in units of the states"
    yield "horizon", f"{sweep.horizon:g} s; what is still moving then is followed further, to {sweep.longest:g} s"
    yield "escape box", f"{sweep.escape:g} times the domain about its centre"
    if verdict["target"]:
        yield "converged means: entered", verdict["target"]
    yield "confidence of the intervals", confidence_text(verdict["confidence"])


def _complex(real: float, imaginary: float) -> str:
    if imaginary == 0:
        return number(real)
    return f"{number(real)} {'+' if imaginary > 0 else '−'} {number(abs(imaginary))}i"


def _matrices(verdict: Verdict) -> list[tuple[str, Sequence[Sequence[str]] | str]]:
    """V of each bound, those of equal V together: P as rows of text, or a formula."""
    functions: dict[str, list[str]] = {}
    for bound in verdict["bounds"]:
        functions.setdefault(json.dumps(bound.get("P", bound.get("V"))), []).append(bound["name"])
    found: list[tuple[str, Sequence[Sequence[str]] | str]] = []
    for text, names in functions.items():
        V = json.loads(text)
        found.append((", ".join(names), V if isinstance(V, str) else [[number(x, 6) for x in row] for row in V]))
    return found


def _flat(values: Mapping[str, Any], before: str = "") -> Iterator[Row]:
    for key, value in values.items():
        if isinstance(value, Mapping):
            yield from _flat(value, f"{before}{key} ")
        elif value is not None:
            yield f"{before}{key}", str(value)
