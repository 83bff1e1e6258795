"""`kneemap status`: where a run stands, read from its journal while another process may be writing it."""

import math
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from runner.errors import Fault, InputError

if TYPE_CHECKING:
    from runner.record import EventRow, Live

SHOWN_EVENTS = 5


def print_status(path: Path, *, events: bool) -> None:
    """One screen: state, points, leg, temperatures, what it waits for, the last events; or the whole log as well."""
    from runner.record import Live

    if not path.is_dir():
        raise InputError([Fault(str(path), "not a run folder; name the folder that holds journal.sqlite")])
    with Live(path) as live:
        for line in _standing(live, path):
            print(line)
        log = live.events(limit=-1)
        shown = log if events else log[-SHOWN_EVENTS:]
        if shown:
            print("log of the night" if events else "last events")
        for event in shown:
            print(f"  {event_line(event)}")
        if len(log) > len(shown):
            print(f"  ({len(log) - len(shown)} earlier ones: --events)")


def event_line(event: "EventRow") -> str:
    """One event as a line: when (UTC), how grave, where in the plan, what and why."""
    place = "".join(
        f" {name} {number}" for name, number in (("leg", event.leg + 1), ("point", event.point)) if number > 0
    )
    return f"{_clock(event.t)} {event.level:<7}{place}  {event.kind}: {event.text}"


def _standing(live: "Live", path: Path) -> list[str]:
    from runner.commands.progress import span
    from runner.plan import expand, parse_plan
    from runner.record import is_acceptable, is_being_acquired

    header, points, legs = live.header(), live.points(limit=-1), live.legs()
    done = len(set(points["plan_index"].tolist()))
    doubtful = sum(1 for quality in points["quality"].tolist() if quality)
    unusable = sum(1 for quality in points["quality"].tolist() if not is_acceptable(int(quality)))
    total = (
        len(expand(parse_plan(header.plan_bytes, header.plan_name)).points) if header.kind == "plan" else done
    )
    is_alive, state = is_being_acquired(path), live.state()
    unfired = (
        f" ({total - done} of the plan were not needed: a climb or a search ended)" if done < total else ""
    )
    lines = [
        header.title,
        f"state     {state}{' (a process is measuring now)' if is_alive else ''}",
        f"points    {done} of {total} recorded{unfired if state == 'finished' else ''}, "
        f"{doubtful} flagged, {unusable} not usable",
        f"time      {span(live.last_time() - header.start)} of bench time in {len(live.sessions())} session(s), "
        f"last entry {_clock(live.last_time())} UTC",
    ]
    begun = [leg for leg in legs if math.isfinite(leg.start)]
    if begun:
        leg = begun[-1]
        ended = (
            f"ended {_clock(leg.end)}" if math.isfinite(leg.end) else f"under way since {_clock(leg.start)}"
        )
        lines.append(
            f"leg       {leg.index + 1} of {len(header.leg_setpoints)} at {leg.setpoint:g} °C, {ended}"
        )
    _, air = live.chamber()
    bodies = [
        f"{part.name} {readings[-1]:.1f} °C"
        for index, part in enumerate(header.parts)
        if len(readings := live.body(index)[1])
    ]
    if len(air):
        lines.append(f"chamber   air {air[-1]:.1f} °C" + "".join(f", {text}" for text in bodies))
    if not is_alive and state != "finished":
        lines.append(f"next      kneemap resume {path}")
    return lines


def _clock(t: float) -> str:
    return f"{datetime.fromtimestamp(t, UTC):%Y-%m-%d %H:%M:%S}"
