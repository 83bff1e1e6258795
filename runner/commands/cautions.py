"""What is said before every run: the energy at hand and how people get hurt."""

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from runner.plan import LoadedPlan

# Above this a direct voltage counts as hazardous to touch (IEC 61010-1, from memory) [V].
HAZARDOUS_VOLTAGE = 60.0
# Bare metal at and above this burns in a few seconds (ISO 13732-1, from memory) [degC].
BURNING_DEGC = 60.0


def cautions(loaded: "LoadedPlan") -> list[str]:
    """The cautions that this plan on this bench calls for, one sentence each."""
    plan, bench = loaded.plan, loaded.bench
    said = []
    if plan.pulse is not None:
        bank = bench.fixture.bank if bench.fixture is not None else None
        if bank is not None:
            energy = bank.capacitance * plan.pulse.rail**2 / 2
            worst = bank.capacitance * plan.limits.rail**2 / 2
            said.append(
                f"The bank will hold {energy:.2g} J at {plan.pulse.rail:g} V, {worst:.2g} J at the rail limit; "
                "a short throws sparks and burns. Discharge it, measure that it is discharged, and short it before you "
                "touch the fixture."
            )
        if plan.limits.rail > HAZARDOUS_VOLTAGE:
            said.append(f"A rail of {plan.limits.rail:g} V is dangerous to touch.")
    said.append("Amperes in an inductor make a field outside it: keep implants, cards and watches away.")
    if max(plan.temperatures.at_degC) >= BURNING_DEGC:
        said.append(
            f"Parts at {max(plan.temperatures.at_degC):g} °C burn skin at a touch; let them cool before you reach in."
        )
    if min(plan.temperatures.at_degC) <= 0:
        said.append(
            "Metal below freezing sticks to skin and collects water; warm and dry it before you reach in."
        )
    said.append(
        "The limits of a plan are software and no safety device: interlock, fuse, over-temperature cut-out and emergency "
        "stop belong in hardware. Follow local rules; this is work for qualified people."
    )
    return said


def print_cautions(loaded: "LoadedPlan") -> None:
    """Print the cautions before anything moves."""
    print(
        "\nCautions"
        + (" (this bench is simulated; on a real one they hold)" if loaded.bench.simulation else "")
    )
    for caution in cautions(loaded):
        print(f"  - {caution}")
