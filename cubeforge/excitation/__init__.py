"""Level populations, and the opacity and emission of a line that follow from them."""

from __future__ import annotations

from cubeforge.excitation.base import Excitation, ExcitationError
from cubeforge.excitation.lte import LteExcitation

__all__ = ["Excitation", "ExcitationError", "LteExcitation"]
