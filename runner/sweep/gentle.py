"""How the chamber is sent to a set-point that lies close to the edge of what the plan allows. Pure.

A chamber overshoots a large step by a kelvin or so. Where that would pass the plan's chamber limits, the set-point is
approached in two steps: most of the way first, the small rest afterwards.
"""

OVERSHOOT = 2.0  # K, of a large step; common practice for climatic chambers, no source
_SHORT_OF = 4.0  # K that are left for the second step


def approach_setpoints(
    air_degC: float, setpoint_degC: float, limits_degC: tuple[float, float]
) -> tuple[float, ...]:
    """Set-points to send one after the other, the last being the one wanted.

    Args:
        air_degC: where the air is now.
        setpoint_degC: where it should go.
        limits_degC: coldest and hottest air that the plan allows.
    """
    low, high = limits_degC
    step = setpoint_degC - air_degC
    room = high - setpoint_degC if step > 0 else setpoint_degC - low
    if abs(step) <= _SHORT_OF or room >= OVERSHOOT:
        return (setpoint_degC,)
    first = setpoint_degC - _SHORT_OF if step > 0 else setpoint_degC + _SHORT_OF
    return (first, setpoint_degC)
