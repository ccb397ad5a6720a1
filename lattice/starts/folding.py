"""When a march shows what each level of a recurrence takes, whether it returns as itself or reflected."""

from __future__ import annotations

from dataclasses import dataclass

from lattice.starts.seams import smooth_step


@dataclass(frozen=True)
class Share:
    """What a level takes of the march at a time: a weight, and whether of its image."""

    time: float
    level: int
    weight: float
    image: bool


def shares(lag: float, folded: bool, nt: int, blend: float) -> list[Share]:
    """Return what every level takes of the march, in the order of time.

    Level n is at `n*T/nt`, T being the lag, or twice that where the flow returns reflected: from the lag on a
    level then is the image of what the march shows one lag before.
    """
    period = 2.0 * lag if folded else lag
    found = []
    for level in range(nt):
        time = level * period / nt
        half = folded and time >= lag * (1.0 - 1e-12)
        inside = max(0.0, time - lag) if half else time
        rising = smooth_step(inside / (blend * lag)) if blend > 0.0 else 1.0
        found.append(Share(inside, level, rising, half))
        if rising < 1.0:
            found.append(Share(inside + lag, level, 1.0 - rising, folded and not half))
    return sorted(found, key=lambda share: (share.time, share.level))
