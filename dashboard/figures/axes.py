"""The value axis that figures share: its scale, its round numbers and how they are written."""

from collections.abc import Iterable
from dataclasses import replace

from dashboard.figures.numbers import Measure
from dashboard.figures.scales import LinearScale, LogarithmicScale, number_ticks, ratio_ticks, tick_decimals

ValueScale = LinearScale | LogarithmicScale


def value_scale(measure: Measure, ends: tuple[float, float], start: float, end: float) -> ValueScale:
    """Differences on a plain scale, ratios on a logarithmic one."""
    kind = LogarithmicScale if measure.ratio else LinearScale
    return kind(*ends, start, end)


def labelled_ticks(measure: Measure, scale: ValueScale, about: int = 5) -> list[tuple[float, str]]:
    """Round values within the scale and their labels: differences with equal decimals, ratios as short as can be."""
    if measure.ratio:
        ticks = ratio_ticks(scale.low, scale.high, about)
        return [
            (tick, replace(measure, decimals=tick_decimals([measure.shown(tick)])).write_compact(tick))
            for tick in ticks
        ]
    ticks = number_ticks(scale.low, scale.high, about)
    written = replace(measure, decimals=tick_decimals(ticks))
    return [(tick, written.write_compact(tick)) for tick in ticks]


def widened(measure: Measure, core: tuple[float, float], bounds: Iterable[float], share: float) -> tuple[float, float]:
    """`core` opened towards `bounds`, on either side by at most `share` of its own length."""
    low, high = core
    if measure.ratio:
        room = (high / low) ** share
        floor, ceiling = low / room, high * room
    else:
        room = (high - low) * share
        floor, ceiling = low - room, high + room
    reached = [low, high, *bounds]
    return max(floor, min(reached)), min(ceiling, max(reached))
