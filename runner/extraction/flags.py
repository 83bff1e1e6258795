"""What is doubtful, in sentences a person can act on."""

from dataclasses import dataclass

from runner.extraction.mean_capture import MeanCapture
from runner.extraction.ramp import Ramp

HUM = 5.0  # offsets of the repeats differ this many times more than noise explains


@dataclass(frozen=True, slots=True)
class Doubt:
    """One doubt: the point's number in the record (-1: the whole part), a short name, and the sentence."""

    point: int
    flag: str
    text: str

    def as_row(self) -> dict[str, int | str]:
        return {"point": self.point, "flag": self.flag, "text": self.text}


def capture_doubts(point: int, mean: MeanCapture, ramp: Ramp | None) -> list[Doubt]:
    """What the captures of one point show."""
    doubts = []
    setting = mean.setting
    if mean.voltage_clipped:
        top = max(abs(setting.code_max * setting.v_scale), abs(setting.code_min * setting.v_scale))
        doubts.append(
            Doubt(
                point,
                "clipped",
                f"voltage channel cut off near {top:.3g} V; raise its range. What follows was left out.",
            )
        )
    if mean.current_clipped:
        top = abs(setting.code_max * setting.i_scale + setting.i_offset)
        doubts.append(
            Doubt(
                point,
                "clipped",
                f"current channel cut off near {top:.3g} A; raise the shunt's range. What follows was left out.",
            )
        )
    if not mean.has_pulse:
        doubts.append(
            Doubt(
                point,
                "no_pulse",
                "no pulse stands out of the noise in these captures; check trigger and wiring.",
            )
        )
    elif ramp is None:
        doubts.append(
            Doubt(
                point,
                "too_short",
                "too few clean samples of the rising current; sample faster or widen the pulse.",
            )
        )
    if ramp is not None and ramp.is_coarse:
        top = float(ramp.current[-1])
        doubts.append(
            Doubt(
                point,
                "coarse",
                f"above {top:.3g} A the current runs away between two samples: the knee is sharper than the sampling "
                "shows. What follows was left out; sample faster or lower the rail.",
            )
        )
    if mean.odd:
        which = ", ".join(str(k) for k in mean.odd)
        doubts.append(Doubt(point, "odd_repeat", f"repeat {which} differs from the others and was left out."))
    if mean.offset_scatter > HUM:
        doubts.append(
            Doubt(
                point,
                "pickup",
                f"the current's zero differs between repeats {mean.offset_scatter:.0f} times more than noise explains:"
                " mains pickup or drift; check the shunt's leads and ground.",
            )
        )
    if mean.has_pulse and mean.pretrigger < 8:
        doubts.append(
            Doubt(
                point,
                "no_pretrigger",
                "nothing was captured before the pulse, so the channels' zeros are taken on trust.",
            )
        )
    return doubts
