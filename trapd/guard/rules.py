"""The names of the rules, as they stand in verdicts, in the record and in README."""

from __future__ import annotations

LIMIT = "limit"
LEVEL = "level"
STEP = "step"
BOUNDARY = "boundary"
FIXED_FREQUENCY = "fixed_frequency"
STABILITY = "stability"
MARGIN = "margin"
MIN_SECULAR_FREQUENCY = "min_secular_frequency"
MIN_DEPTH = "min_depth"
PATH = "path"
TICKLE_LEVEL = "tickle_level"
TICKLE_BAND = "tickle_band"
TICKLE_BURST = "tickle_burst"

RULES: dict[str, str] = {
    LIMIT: "the value lies between min and max of its setpoint, at the top of the gain's uncertainty",
    LEVEL: "the synthesizer is not asked for more than level_max, nor for more than it can give",
    STEP: "the instrument resolves steps as small as the largest allowed step",
    BOUNDARY: "with ions in the trap no range boundary of an instrument is crossed",
    FIXED_FREQUENCY: "with a flat gain the drive frequency stays where it is while ions are in the trap",
    STABILITY: "every species held moves inside the first stability region",
    MARGIN: "and still does with each setpoint alone displaced by the margin",
    MIN_SECULAR_FREQUENCY: "every secular frequency is at least min_secular_frequency",
    MIN_DEPTH: "the well is at least min_depth deep",
    PATH: "the whole way there obeys the rules above, one setpoint at a time",
    TICKLE_LEVEL: "a tickle is no stronger than tickle.level_max, nor than its generator can give",
    TICKLE_BAND: "a tickle stays within its generator's range and under half the drive frequency",
    TICKLE_BURST: "a tickle comes in bursts that its generator ends by itself",
}
