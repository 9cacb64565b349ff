"""Fringes along a line, a second road to a spacing."""

from fringespan.profile.fringe_profile import FringeProfile, measure_profile
from fringespan.profile.strip import SHORTEST_LINE_PX

__all__ = ["SHORTEST_LINE_PX", "FringeProfile", "measure_profile"]
