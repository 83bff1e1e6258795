"""Set-points near the edge of the plan's chamber limits."""

import pytest

from runner.sweep.gentle import approach_setpoints


@pytest.mark.parametrize(
    ("air", "setpoint", "steps"),
    [
        (25.0, 85.0, (85.0,)),
        (25.0, 129.0, (125.0, 129.0)),  # 1 K of room above: an overshoot of 2 K would not fit
        (25.0, 128.0, (128.0,)),
        (25.0, -44.5, (-40.5, -44.5)),
        (127.0, 129.0, (129.0,)),  # a small step hardly overshoots
        (129.0, 25.0, (25.0,)),
    ],
)
def test_steps(air: float, setpoint: float, steps: tuple[float, ...]) -> None:
    assert approach_setpoints(air, setpoint, (-45.0, 130.0)) == steps
