"""Pictures of finished results, sized for a journal column: a cast, a section, a map of a grid, a map of casts.

Nothing of the science is computed here. Depth runs downward, every line differs from the others by more than its
colour, and what cannot be shown is said in the legend instead of being left out.
"""

from habitat.figures.frame import save
from habitat.figures.maps import station_map, thickness_map
from habitat.figures.profile import profile_picture
from habitat.figures.section import section_picture

__all__ = ["profile_picture", "save", "section_picture", "station_map", "thickness_map"]
