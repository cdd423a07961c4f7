"""How numbers become colours and words: colour scales, units, offsets on the sky, names."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.colors import LogNorm, Normalize
from matplotlib.font_manager import FontProperties, findfont, get_font

Image = npt.NDArray[np.float64]

SEQUENTIAL = "viridis"
DIVERGING = "coolwarm"
COLUMN = "magma"
DECADES = 4.0
"""Most decades that a logarithmic scale spans below its top."""

_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@dataclass(frozen=True)
class Scale:
    """From values to colours.

    Attributes
    ----------
    norm : matplotlib Normalize
        Of values divided by `factor`.
    colours : str
        Name of a colour map.
    extend : str
        "neither", "min", "max" or "both": which ends of the colour bar stand for values beyond it.
    factor : float
        Power of ten that values are divided by, so that the ticks are short.
    """

    norm: Any
    colours: str
    extend: str = "neither"
    factor: float = 1.0

    def label(self, unit: str) -> str:
        """Words for the colour bar: the unit and the power of ten."""
        power = round(math.log10(self.factor))
        return " ".join(part for part in (power_text(power), unit_text(unit)) if part)


def power_text(power: int) -> str:
    """``power_text(6) == "10⁶"``; nothing for a power of 0."""
    return f"10{str(power).translate(_SUPERSCRIPTS)}" if power else ""


def unit_text(unit: str) -> str:
    """Unit with raised exponents: ``unit_text("g cm-2") == "g cm⁻²"``."""
    return re.sub(r"(?<=[A-Za-z])-?\d+", lambda found: found[0].translate(_SUPERSCRIPTS), unit)


def brightness_scale(values: Image) -> Scale:
    """Linear scale for brightness above the background, and for its integral.

    Emission runs up from 0, absorption down from 0 (the deepest is the darkest); both together, when the
    lesser is more than a fifth of the greater, diverge from 0. The end of the scale is the 99.8th percentile
    of what is above a hundredth of the extreme when the extreme is far beyond it: otherwise one bright core
    blackens a whole cloud. The colour bar then says so with an arrow.
    """
    values = values[np.isfinite(values)]
    low, high = (float(values.min()), float(values.max())) if values.size else (0.0, 0.0)
    factor = short_factor(max(high, -low))
    if high > 0.0 and -low > 0.2 * high and high > 0.2 * -low:
        reach = max(_top(values), _top(-values))
        return _linear(-reach, reach, low, high, DIVERGING, factor)
    if -low > high:
        return _linear(-_top(-values), max(high, 0.0), low, high, SEQUENTIAL, factor)
    return _linear(min(low, 0.0), _top(values), low, high, SEQUENTIAL, factor)


def _top(values: Image) -> float:
    """Where a scale from 0 upwards ends; 0 when nothing is above 0."""
    highest = float(values.max(initial=0.0))
    if highest <= 0.0:
        return 0.0
    usual = float(np.percentile(values[values > 0.01 * highest], 99.8))
    return usual if usual < 0.7 * highest else highest


def _linear(start: float, stop: float, low: float, high: float, colours: str, factor: float) -> Scale:
    if stop <= start:
        stop = start + factor
    norm = Normalize(start / factor, stop / factor)
    return Scale(norm, colours, extension(low < start, high > stop), factor)


def velocity_scale(velocity: Image, weight: Image, least: float) -> Scale:
    """Diverging scale around the mean velocity, red receding; half its span is at least `least`, in km/s."""
    known = np.isfinite(velocity)
    if not known.any():
        return Scale(Normalize(-least, least), DIVERGING)
    values = velocity[known]
    centre = float(np.average(values, weights=weight[known]))
    span = max(float(np.percentile(np.abs(values - centre), 99.0)), least)
    start, stop = centre - span, centre + span
    beyond = extension(bool(values.min() < start), bool(values.max() > stop))
    return Scale(Normalize(start, stop), DIVERGING, beyond)


def column_scale(values: Image) -> Scale:
    """Logarithmic scale for what is positive; what is 0 or less has the lowest colour."""
    positive = values[np.isfinite(values) & (values > 0.0)]
    if not positive.size:
        return Scale(Normalize(0.0, 1.0), COLUMN)
    high = float(positive.max())
    low = max(float(positive.min()), high / 10**DECADES)
    beyond = extension(bool(np.nanmin(values) < low), False)
    if high < 1.5 * low:
        # Nearly one value: still a scale with a tick on it.
        low, high = low / 3.0, high * 3.0
    return Scale(LogNorm(low, high, clip=True), COLUMN, beyond)


def extension(below: bool, above: bool) -> str:
    """Which ends of a colour bar are arrows."""
    return {(False, False): "neither", (True, False): "min", (False, True): "max"}.get((below, above), "both")


def short_factor(size: float) -> float:
    """Power of 1000 to divide by, 1 where numbers up to `size` are short as they are."""
    if size == 0.0 or 1e-2 <= size < 1e4:
        return 1.0
    return float(10.0 ** (3 * math.floor(math.log10(size) / 3)))


def sky_unit(extent: float) -> tuple[str, float]:
    """Unit for offsets in an image whose longer side is `extent` radians, and its size in radians."""
    degree = math.pi / 180.0
    if extent >= 3.0 * degree:
        return "degrees", degree
    if extent >= 3.0 * degree / 60.0:
        return "arcmin", degree / 60.0
    return "arcsec", degree / 3600.0


def decimals(step: float) -> int:
    """Decimals that tell numbers apart that are `step` or more from each other."""
    return min(max(0, 1 - math.floor(math.log10(step))), 6) if step < 10.0 else 0


def printable(text: str, longest: int) -> str:
    """Text as the font can draw it, on one line, shortened in the middle."""
    glyphs = get_font(findfont(FontProperties())).get_charmap()
    # A missing glyph would be drawn as a box, with a warning.
    text = "".join(letter if letter.isprintable() and ord(letter) in glyphs else "?" for letter in text)
    if len(text) <= longest:
        return text
    half = (longest - 1) // 2
    return f"{text[:half]}…{text[-half:]}"
