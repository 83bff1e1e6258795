"""Has a sensor stopped? One that scattered before and now repeats itself to the last digit is not measuring any more. Pure.

A sensor that is coarse, or has always stood still, is not judged here: only a change of manners tells. (A soak, where the
truth is known to move, judges a sensor that never moved; see `soak.py`.)
"""

from dataclasses import dataclass, replace

_KNOWN = 30  # readings that tell a sensor's manners
_LIVELY = 0.9  # share of them that must have differed from the one before
_EQUAL = 10  # equal readings in a row; at a share of 0.9 chance gives 1e-10


@dataclass(frozen=True, slots=True)
class Manners:
    """What was seen of a sensor so far.

    Attributes:
        last: reading; readings: how many; changes: how many differed from the one before; equal: in a row at the end.
    """

    last: float = float("nan")
    readings: int = 0
    changes: int = 0
    equal: int = 0

    def after(self, reading: float) -> "Manners":
        """With one reading more."""
        if reading == self.last:
            return replace(self, readings=self.readings + 1, equal=self.equal + 1)
        return Manners(reading, self.readings + 1, self.changes + 1, 0)

    @property
    def is_stuck(self) -> bool:
        """It scattered, and has stopped to."""
        before = self.readings - self.equal
        return self.equal >= _EQUAL and before >= _KNOWN and self.changes >= _LIVELY * before
