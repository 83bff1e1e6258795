"""The digitizer: two channels, one trigger, samples as the codes of its converter.

Codes are handed on as they came, with the scale beside them: they are exact, small, and show where the
converter ended. Volts at the input are `code * scale + offset`. The dialect says where the scale comes from:
from the range that was read back (a constant code stands for its end), or from the instrument, asked once
after each change of settings.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.blocks import Samples
from drivers.dialect import Codes, Dialect
from drivers.errors import Garbled, NoReply
from drivers.instrument import Instrument
from drivers.session import Session

SampleCodes = NDArray[np.int16] | NDArray[np.int32]

# Samples sent in volts (REAL,32 or ASCII) are coded here in this many steps a range: float32 has 24 bits, so
# no finer.
_STEPS_OF_REAL = 2**23

# The last code of an 8-bit converter stands at 127/128 of the range, that of a finer one nearer to its end.
# Nearer than this to the end, a sample may have been cut off, whatever the bits, which SCPI-1999 has no
# header to ask for.
_CLIP_FROM = 0.99

_POLLS_WHILE_MEASURING = 1000
_POLLS_UNTIL_DONE = 20


@dataclass(frozen=True, slots=True)
class DigitizerSetup:
    """How one pulse is captured.

    Attributes:
        samples: per channel.
        interval: between samples [s].
        pretrigger_samples: how many of them before the trigger.
        voltage_range, shunt_range: full scale is plus and minus this, at the input [V].
    """

    samples: int
    interval: float
    pretrigger_samples: int
    voltage_range: float
    shunt_range: float


@dataclass(frozen=True, slots=True)
class Scaling:
    """Volts at the input are `code * scale + offset`, for each channel."""

    voltage_scale: float
    voltage_offset: float
    shunt_scale: float
    shunt_offset: float


@dataclass(frozen=True, slots=True)
class Capture:
    """One digitized pulse.

    Attributes:
        voltage, shunt: codes, shape [samples] each.
        voltage_scale, voltage_offset, shunt_scale, shunt_offset: volts at the input are `code * scale +
        offset`. interval: between samples [s]. first: time of the first sample from the trigger [s];
        negative. code_min, code_max: a code at or beyond one of these may have been cut off.
    """

    voltage: SampleCodes
    shunt: SampleCodes
    voltage_scale: float
    voltage_offset: float
    shunt_scale: float
    shunt_offset: float
    interval: float
    first: float
    code_min: int
    code_max: int


class Digitizer(Instrument):
    """Captures the voltage across the part and across the shunt."""

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        self._setup: DigitizerSetup | None = None
        self._scaling: Scaling | None = None
        self._set_after = 0  # how many restarts there had been by then

    def reset(self) -> None:
        self._setup = None
        super().reset()

    def set(self, setup: DigitizerSetup) -> DigitizerSetup:
        """Sets everything a capture depends on; returns what the instrument made of it."""
        self._setup = self._scaling = None
        numbers = self._talk.carry_out(
            "set",
            samples=setup.samples,
            interval=float(setup.interval),
            pretrigger_samples=setup.pretrigger_samples,
            voltage_range=float(setup.voltage_range),
            shunt_range=float(setup.shunt_range),
        ).numbers
        accepted = DigitizerSetup(
            samples=round(numbers.get("samples", setup.samples)),
            interval=numbers.get("interval", setup.interval),
            pretrigger_samples=round(numbers.get("pretrigger_samples", setup.pretrigger_samples)),
            voltage_range=numbers.get("voltage_range", setup.voltage_range),
            shunt_range=numbers.get("shunt_range", setup.shunt_range),
        )
        if not (
            accepted.samples > 0
            and accepted.interval > 0
            and accepted.voltage_range > 0
            and accepted.shunt_range > 0
        ):
            raise self._disagrees(f"asked for {setup}, it says that it is set to {accepted}")
        self._scaling = self._ask_scaling(accepted)
        self._setup = accepted
        self._set_after = self._talk.restarts
        return accepted

    def arm(self) -> None:
        """Waits for the next trigger from now on; an earlier capture is gone."""
        self._talk.carry_out("arm")

    def fetch(self) -> Capture | None:
        """Both channels of the pulse since `arm`, in one round trip; None when no trigger came.

        Raises:
            RuntimeError: `set` was not called, or not since a restart, so nobody knows what the codes mean.
        """
        if self._setup is None or self._scaling is None or self._set_after != self._talk.restarts:
            raise RuntimeError("a digitizer is set before anything is fetched from it")
        if not self._is_done():
            return None
        setup, scaling = self._setup, self._scaling
        samples = self._talk.carry_out("fetch", sample_count=setup.samples).samples
        voltage, shunt = samples["voltage"], samples["shunt"]
        if len(voltage) != setup.samples or len(shunt) != setup.samples:
            self._talk.distrust()
            raise Garbled(
                self.role,
                self.resource,
                f"set to {setup.samples} samples, it sent {len(voltage)} and {len(shunt)}; "
                "check the dialect's 'of:'",
            )
        low, high = _clip_limits(self.dialect.codes, setup, scaling)
        return Capture(
            voltage=_codes(voltage, scaling.voltage_scale),
            shunt=_codes(shunt, scaling.shunt_scale),
            voltage_scale=scaling.voltage_scale,
            voltage_offset=scaling.voltage_offset,
            shunt_scale=scaling.shunt_scale,
            shunt_offset=scaling.shunt_offset,
            interval=setup.interval,
            first=-setup.pretrigger_samples * setup.interval,
            code_min=low,
            code_max=high,
        )

    def _ask_scaling(self, setup: DigitizerSetup) -> Scaling:
        if "scaling" in self.dialect.intents:
            return Scaling(**self._talk.carry_out("scaling").numbers)
        codes = self.dialect.codes
        steps = codes.full_scale if codes and codes.full_scale else _STEPS_OF_REAL
        return Scaling(setup.voltage_range / steps, 0.0, setup.shunt_range / steps, 0.0)

    def _is_done(self) -> bool:
        """Waits while it measures, and a little where it cannot tell measuring from waiting."""
        for polls in range(_POLLS_WHILE_MEASURING):
            flags: Mapping[str, bool] = self._talk.carry_out("state").flags
            if flags.get("waiting"):
                return False
            if not flags.get("measuring") and flags.get("done", True):
                return True
            if not flags.get("measuring") and polls >= _POLLS_UNTIL_DONE:
                return False
        raise NoReply(
            self.role, self.resource, "still measuring after a long time; check its time base, or reset it"
        )


def _codes(samples: Samples, scale: float) -> SampleCodes:
    if samples.dtype == np.int16 or samples.dtype == np.int32:
        return samples  # type: ignore[return-value]  # the dtype was just looked at
    # SCPI's infinities and "not a number" (9.9E37 and up) are no voltages: they go beyond the end, as cut
    # off.
    steps = np.clip(
        np.nan_to_num(samples.astype(np.float64) / scale, nan=np.inf),
        -2.0 * _STEPS_OF_REAL,
        2.0 * _STEPS_OF_REAL,
    )
    return np.rint(steps).astype(np.int32)


def _clip_limits(codes: Codes | None, setup: DigitizerSetup, scaling: Scaling) -> tuple[int, int]:
    """Codes at or beyond which a sample of either channel may have been cut off."""
    if codes is not None and codes.clip is not None:
        return codes.clip
    highs = (
        (_CLIP_FROM * setup.voltage_range - scaling.voltage_offset) / scaling.voltage_scale,
        (_CLIP_FROM * setup.shunt_range - scaling.shunt_offset) / scaling.shunt_scale,
    )
    lows = (
        (-_CLIP_FROM * setup.voltage_range - scaling.voltage_offset) / scaling.voltage_scale,
        (-_CLIP_FROM * setup.shunt_range - scaling.shunt_offset) / scaling.shunt_scale,
    )
    return math.floor(max(lows)), math.ceil(min(highs))
