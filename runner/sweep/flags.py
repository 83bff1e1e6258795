"""Is a point to be believed? Each flag judged from what was measured, with the sentence that says why. Pure."""

from collections.abc import Iterable
from dataclasses import dataclass

from runner.record import Flag
from runner.sweep.look import Look

_SAG = 0.05  # of the rail: a bank that falls further in a pulse, or has not come back for it
_START_OF_PEAK = 0.03  # a start current above this share of the peak moves Isat noticeably
_START_OF_RANGE = 0.01  # below this share of full scale it is the digitizer's own offset
_OPEN = 0.05  # of the current that the nominal inductance would let through
_SHORT = (
    0.15  # of the nominal inductance: no core leaves so little at the start of a pulse or at little current
)
_LITTLE = 0.3  # of the rated current: no part is saturated there
_SHORT_RESISTANCE = 0.3  # of the nominal winding resistance
_OPEN_RESISTANCE = 5.0


@dataclass(frozen=True, slots=True)
class Judgement:
    """Flags of a point and their sentences."""

    flags: Flag
    texts: tuple[str, ...] = ()

    def __or__(self, other: "Judgement") -> "Judgement":
        return Judgement(self.flags | other.flags, self.texts + other.texts)


GOOD = Judgement(Flag(0))


def all_of(judgements: Iterable[Judgement]) -> Judgement:
    """Every flag and every sentence."""
    together = GOOD
    for one in judgements:
        together = together | one
    return together


def judge_clipping(
    voltage_clipped: int, current_clipped: int, voltage_range: float, shunt_range: float
) -> Judgement:
    """From the number of samples at the end of each channel's codes; ranges are +- full scale [V]."""
    texts = [
        f"{name} channel clipped in {count} samples; its range is {size:g} V"
        for name, count, size in (
            ("voltage", voltage_clipped, voltage_range),
            ("shunt", current_clipped, shunt_range),
        )
        if count
    ]
    return Judgement(Flag.CLIPPED, tuple(texts)) if texts else GOOD


def judge_pulse(look: Look, *, rail: float, rail_before: float, full_scale: float) -> Judgement:
    """Bank and start of the current.

    Args:
        look: the point.
        rail: set-point of the rail [V].
        rail_before: measured before the captures [V], NaN if not measured.
        full_scale: of the current channel [A].
    """
    found = []
    if look.drive - look.end_drive > _SAG * look.drive:
        sag = 1 - look.end_drive / look.drive
        found.append(Judgement(Flag.BANK_SAGGED, (f"voltage fell by {sag:.1%} during the pulse",)))
    elif rail_before < (1 - _SAG) * rail:
        found.append(
            Judgement(Flag.BANK_SAGGED, (f"bank at {rail_before:.2f} V before the pulse, {rail:g} V asked",))
        )
    if abs(look.start_current) > max(_START_OF_PEAK * look.peak, _START_OF_RANGE * full_scale):
        found.append(Judgement(Flag.OFFSET_CURRENT, (f"{look.start_current:.3g} A before the pulse",)))
    return all_of(found)


def judge_temperature(body_degC: float, soaked_degC: float, within: float, *, is_settled: bool) -> Judgement:
    """Body against where it was when the soak ended; a point of a leg that did not settle says so instead."""
    if not is_settled:
        return Judgement(Flag.NOT_SETTLED, ("the soak had given up",))
    if abs(body_degC - soaked_degC) > within:
        return Judgement(
            Flag.TEMPERATURE_DRIFTED,
            (f"body at {body_degC:.2f} degC, {soaked_degC:.2f} degC when the soak ended",),
        )
    return GOOD


def judge_part_pulse(look: Look | None, *, width: float, rail: float, nominal_inductance: float) -> Judgement:
    """Is there a part at all, and is it more than a wire? None stands for a pulse that nobody saw."""
    if look is None:
        return GOOD
    expected = look.flux_linkage / nominal_inductance
    if look.peak < _OPEN * expected:
        return Judgement(Flag.PART_OPEN, (f"{look.peak:.3g} A where {expected:.3g} A would flow",))
    if look.start_slope * _SHORT * nominal_inductance > 1:
        return Judgement(Flag.PART_SHORT, (f"{1 / look.start_slope:.3g} H at the start of the pulse",))
    return GOOD


def judge_winding(resistance: float, nominal: float) -> Judgement:
    """Winding resistance against its nominal value at this temperature [ohm]; NaN is no evidence."""
    if resistance > _OPEN_RESISTANCE * nominal:
        return Judgement(Flag.PART_OPEN, (f"winding {resistance:.4g} ohm, {nominal:.4g} ohm expected",))
    if resistance < _SHORT_RESISTANCE * nominal:
        return Judgement(Flag.PART_SHORT, (f"winding {resistance:.4g} ohm, {nominal:.4g} ohm expected",))
    return GOOD


def judge_bias(
    *,
    wanted: float,
    flowing: float,
    inductance: float,
    resistance: float,
    nominal_inductance: float,
    nominal_resistance: float,
    rated_current: float,
) -> Judgement:
    """A bias current that does not flow means an open part; hardly any inductance or resistance, a short [A, H, ohm].

    `resistance` is that of the winding by the bias source, NaN where the current was too small to tell; `inductance` NaN
    where the meter had none.
    """
    if wanted > 0 and flowing < _OPEN * wanted:
        return Judgement(Flag.PART_OPEN, (f"{flowing:.3g} A flow, {wanted:.3g} A set",))
    if inductance < _SHORT * nominal_inductance and wanted <= _LITTLE * rated_current:
        return Judgement(Flag.PART_SHORT, (f"{inductance:.3g} H left of {nominal_inductance:.3g} H",))
    if resistance < _SHORT_RESISTANCE * nominal_resistance:
        return Judgement(
            Flag.PART_SHORT, (f"winding {resistance:.4g} ohm, {nominal_resistance:.4g} ohm expected",)
        )
    return GOOD
