"""The page: everything gathered, drawn, written into tables, and set into one template.

`write_report` is the only function of this room that touches the disk, apart from saving pictures: it writes
into the folder ``report/`` of the run, and takes away the pictures that an earlier report left there.
The page holds its pictures and its style; it asks the network for nothing. Nothing on it depends on the time
at which it was made, so the same run gives the same page.
"""

import re
from collections.abc import Iterator, Mapping
from datetime import UTC, datetime
from pathlib import Path, PurePath
from typing import Any

import jinja2
import numpy as np
from markupsafe import Markup, escape

from runner.errors import InputError
from runner.record import Run, open_run
from runner.report import look
from runner.report.captures import draw_captures
from runner.report.curves import draw_curves, draw_surface
from runner.report.digits import NOTHING, celsius, duration, fixed
from runner.report.doubts import doubts
from runner.report.extras import extra_tables, extra_texts
from runner.report.facts import INDUCTANCE, METHOD_TITLES, Facts, MethodFacts, PartFacts, gather, number
from runner.report.knee import draw_knees, draw_overview, draw_resistance
from runner.report.night import MOST_NUMBERS, Mark, draw_night, marks
from runner.report.picture import Pasted, Picture, save
from runner.report.provenance import calibration, instruments, versions
from runner.report.tables import (
    Table,
    budget_table,
    cross_check_table,
    knee_tables,
    temperature_table,
    together_table,
)
from runner.report.words import (
    headline,
    headline_drop,
    hold_together,
    plan_in_words,
    read_plan,
)

CAUTIONS = (
    "Limits in software are no safety device. Interlock and emergency stop belong in hardware, and the rules of the "
    "place and its qualified people come first.",
    "The capacitor bank stores energy and stays charged after the supply is off: discharge it and measure that it is "
    "discharged before touching anything.",
    "Interrupting amperes in an inductor makes sparks and high voltage: open no connection under current.",
    "The part, the shunt and everything in the chamber can burn the skin, and cold metal does too.",
    "Large currents and magnets act at a distance: keep people with pacemakers or other implants away.",
)
_METHOD_WORDS = {
    "pulse": "Pulse method: a charged capacitor bank is switched onto the part, and the voltage across it and the current "
    "through it are digitized. The flux linkage λ is the integral of the voltage less the winding's own drop; the "
    "differential inductance is its slope, L_d = dλ/di. No constant voltage is assumed.",
    "bias": "Bias method: a direct current flows through the part and a meter measures its inductance for a small signal "
    "on top: the incremental (reversible) inductance.",
}
_MEANINGS = {
    "pulse": "The slope of flux linkage against current, L_d = dλ/di, while the current rises from zero.",
    "bias": "The inductance for a small signal on top of a direct current. In a core with hysteresis it is lower than the "
    "differential inductance of the pulse method; the two are never merged.",
}
_FINISHED = "finished"


def write_report(folder: Path) -> Path:
    """Write the report of a run.

    Args:
        folder: the run's folder; extraction may be missing, the run may be unfinished.

    Returns:
        The page, ``report/index.html`` in the folder; beside it a PNG and a CSV for each picture.

    Raises:
        InputError: ``folder`` is not a run.
    """
    with open_run(folder) as run, look.settings():
        into = run.folder / "report"
        into.mkdir(exist_ok=True)
        _clear(into)
        page = into / "index.html"
        text = _render(_context(run, into))
    page.write_text(text, encoding="utf-8", newline="\n")
    return page


def _clear(folder: Path) -> None:
    """Take away the pictures of an earlier report, lest one that is no longer made passes for a new one."""
    for path in folder.iterdir():
        if path.suffix in (".png", ".csv") and re.match(r"part_\d\d_|night$|together_", path.stem):
            path.unlink()


def headlines(folder: Path) -> tuple[str, ...]:
    """The sentence that answers for each part, as the page has it on top; none before an extraction.

    Raises:
        InputError: the folder is no run.
    """
    with open_run(folder) as run:
        if run.result is None:
            return ()
        facts = gather(run, _rated_currents(run))
        return tuple(headline(facts, part) for part in facts.parts)


def _context(run: Run, into: Path) -> dict[str, Any]:
    plan = read_plan(run.plan_bytes)
    facts = gather(run, _rated_currents(run))
    told = marks(run)

    def paste(picture: Picture | None) -> Pasted | None:
        return save(picture, into) if picture else None

    return {
        "css": _template_text("page.css"),
        "title": run.title,
        "under": _under(run),
        "troubles": list(_troubles(run, facts)),
        "parts": [_part(run, facts, part, paste) for part in facts.parts],
        "together": _together(facts, paste),
        "tested": [(what, hold_together(how)) for what, how in plan_in_words(plan)],
        "methods": [
            _subscripts(_METHOD_WORDS[name]) for name in _METHOD_WORDS if name in plan or _has(facts, name)
        ],
        "cautions": CAUTIONS,
        "run_in_time": _run_in_time(run),
        "night": paste(draw_night(run, told)),
        "legs": _leg_rows(run) if run.kind != "captures" else [],
        "marks": [_mark_row(mark) for mark in told[:MOST_NUMBERS]],
        "marks_left": max(0, len(told) - MOST_NUMBERS),
        "instruments": instruments(run),
        "calibration": calibration(run),
        "versions": list(versions(run)),
        "files": [
            (PurePath(name).name, data.decode("utf-8", errors="replace"))
            for name, data in ((run.plan_name, run.plan_bytes), (run.bench_name, run.bench_bytes))
            if data
        ],
    }


def _rated_currents(run: Run) -> dict[int, float]:
    """Rated current by part, from the plan or the captures file as the record keeps them; empty if they say
    none.
    """
    if run.result is not None and all("rated_current" in part for part in run.result.get("parts", [])):
        return {}  # the extraction passed them on; reading a plan would cost more time than the tables do
    from runner.plan import parse_captures, parse_plan

    try:
        if run.kind == "captures":
            parts = [parse_captures(run.plan_bytes, run.plan_name).part]
        else:
            parts = list(parse_plan(run.plan_bytes, run.plan_name).parts)
    except InputError:  # an old plan that today's reader refuses: its text is on the page all the same
        return {}
    return {index: float(part.rated_current) for index, part in enumerate(parts)}


def _part(run: Run, facts: Facts, part: PartFacts, paste: Any) -> dict[str, Any]:
    return {
        "slug": part.slug,
        "label": part.label,
        "headline": hold_together(headline(facts, part)),
        "sentences": [*map(str, part.extras.get("sentences") or []), *extra_texts(part.extras)],
        "methods": [_method(facts, part, method, paste) for method in part.methods],
        "saturation": paste(draw_knees(facts, part)),
        "resistance": paste(draw_resistance(facts, part)),
        "resistance_tables": _resistance_tables(facts, part),
        "captures": paste(draw_captures(run, part, _knee_by_leg(run, part))),
        "extras": list(extra_tables(part.extras, facts.coverage)),
        "cross_check": cross_check_table(part),
        "doubts": doubts(run, part),
    }


def _method(facts: Facts, part: PartFacts, method: MethodFacts, paste: Any) -> dict[str, Any]:
    inductance = INDUCTANCE[method.name]
    title = f"Initial {inductance}"
    initial = temperature_table(facts, title, method.initial, "H", title=title) if method.initial else None
    return {
        "title": METHOD_TITLES[method.name],
        "inductance": inductance,
        "meaning": _subscripts(_MEANINGS[method.name]),
        "knees": knee_tables(facts, part, method),
        "curves": paste(draw_curves(facts, part, method)),
        "surface": paste(draw_surface(part, method)),
        "initial": initial,
        "budget": budget_table(method, headline_drop(method)),
        "extras": list(extra_tables(method.extras, facts.coverage)),
        "texts": list(extra_texts(method.extras)),
    }


def _resistance_tables(facts: Facts, part: PartFacts) -> list[Table]:
    known = [method for method in part.methods if method.resistance]
    if len({method.resistance for method in known}) == 1:  # both methods stand on one measurement
        return [temperature_table(facts, "Winding resistance", known[0].resistance, "ohm", title="")]
    return [
        temperature_table(facts, "Resistance", method.resistance, "ohm", title=METHOD_TITLES[method.name])
        for method in known
    ]


def _together(facts: Facts, paste: Any) -> dict[str, Any] | None:
    if len(facts.parts) < 2:
        return None
    drops = [drop for part in facts.parts for m in part.methods[:1] if (drop := headline_drop(m)) is not None]
    if not drops:
        return None
    drop = max(set(drops), key=drops.count)
    return {"table": together_table(facts, drop), "picture": paste(draw_overview(facts, drop))}


def _has(facts: Facts, method: str) -> bool:
    return any(part.method(method) for part in facts.parts)


def _under(run: Run) -> str:
    when = datetime.fromtimestamp(run.start, UTC).strftime("%Y-%m-%d %H:%M UTC")
    if run.kind == "captures":
        return f"Captures taken by hand, brought into this record {when}."
    return f"Measurement begun {when}, lasting {duration(run.end - run.start)}."


def _troubles(run: Run, facts: Facts) -> Iterator[tuple[str, str]]:
    count = len(run.points["point"])
    if run.state != _FINISHED:
        yield (
            "This run is not complete.",
            f"Its state is '{run.state}'; {count} points are recorded. What follows covers these only.",
        )
    if count == 0:
        yield ("No points.", "Nothing was measured, or nothing that can be used.")
    elif not facts.is_extracted:
        yield ("Not extracted yet.", "There are points but no result; 'kneemap extract' makes it.")
    for part in facts.parts:
        against = [row for row in part.extras.get("cross_check") or [] if row.get("agrees") is False]
        if against:
            told = " ".join(
                f"At {celsius(number(r.get('temperature_degC')), 0)}, {r.get('text', '')}" for r in against
            )
            yield f"The two methods disagree about {part.label}.", told


def _run_in_time(run: Run) -> str:
    count = len(run.points["point"])
    if count == 0:
        return "No points that can be used."
    flagged = int(np.count_nonzero(run.points["quality"]))
    text = f"{count} points" + (f", {flagged} of them flagged" if flagged else ", none flagged")
    if run.kind != "captures":
        text += f", in {duration(run.end - run.start)}"
    if len(run.sessions) > 1:
        text += f" and {len(run.sessions)} sessions"
    repeated = len(run.all_points["point"]) - count
    return text + "." + (f" {repeated} further attempts were of no use." if repeated else "")


def _leg_rows(run: Run) -> list[tuple[str, ...]]:
    points = run.points
    rows: list[tuple[str, ...]] = []
    for leg in run.legs:
        mine = points["leg"] == leg.index
        body = points["body_temperature"][mine & np.isfinite(points["body_temperature"])]
        rows.append(
            (
                fixed(leg.setpoint, 1),
                fixed(float(body.mean()), 1) if body.size else NOTHING,
                duration(leg.start),
                duration(leg.end - leg.start),
                str(int(mine.sum())),
                str(int(np.count_nonzero(points["quality"][mine]))),
            )
        )
    return rows


def _mark_row(mark: Mark) -> dict[str, str]:
    text = mark.text + (f" (and {mark.count - 1} more alike)" if mark.count > 1 else "")
    if mark.point >= 0:
        text = f"Point {mark.point}: {text}"
    return {
        "number": str(mark.number),
        "after": duration(mark.time),
        "leg": mark.leg,
        "level": mark.level,
        "kind": mark.kind.replace("_", " "),
        "text": text,
    }


def _knee_by_leg(run: Run, part: PartFacts) -> dict[int, float]:
    """Saturation current of the pulse method at the headline's drop, by the leg whose temperature is
    nearest.
    """
    method = part.method("pulse")
    drop = headline_drop(method) if method else None
    if method is None or drop is None:
        return {}
    knees = [knee for knee in method.knees_at(drop) if knee.is_reached]
    if not knees:
        return {}
    nearest = {
        leg.index: min(knees, key=lambda knee: abs(knee.temperature_degC - leg.setpoint)) for leg in run.legs
    }
    return {leg: knee.estimate.value for leg, knee in nearest.items()}


def _render(context: Mapping[str, Any]) -> str:
    environment = jinja2.Environment(
        loader=jinja2.FunctionLoader(_template_text),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=False,
    )
    return environment.get_template("page.html.j2").render(context)


def _subscripts(text: str) -> Markup:
    """``L_d`` as the symbol is printed."""
    return Markup(re.sub(r"\b([A-Zλ])_(\w)\b", r"\1<sub>\2</sub>", str(escape(text))))


def _template_text(name: str) -> str:
    return (Path(__file__).parent / "templates" / name).read_text(encoding="utf-8")
