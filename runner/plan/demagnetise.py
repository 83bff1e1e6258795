"""How a core is brought back to its virgin state with pulses: full width first, then less and less, polarity alternating.

Each pulse undoes most of what the one before it left; as they shrink, so does what is left. A core of any hysteresis forgets
in this way if the first pulse saturates it and the last ones no longer move it (the usual way with alternating current).
"""

SMALLER = (
    0.8  # of the pulse before; the mock's remembering core keeps 0.3 % of its remanence, with 0.9 hardly less
)
LAST = 0.03  # of the first width, from which on a pulse is too small to write anything


def demagnetising_widths(width: float) -> tuple[float, ...]:
    """Widths of the train [s], beginning with `width`; the polarity changes from each to the next."""
    widths: list[float] = []
    while not widths or widths[-1] * SMALLER >= LAST * width:
        widths.append(widths[-1] * SMALLER if widths else width)
    return tuple(widths)
