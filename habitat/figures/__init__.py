"""Pictures of finished results, sized for a journal column: casts, sections, maps, and respirometry trials.

Nothing of the science is computed here. Depth runs downward, every line differs from the others by more than its
colour, and what cannot be shown is said in the legend instead of being left out.
"""

from habitat.figures.frame import save
from habitat.figures.maps import station_map, thickness_map
from habitat.figures.profile import profile_picture
from habitat.figures.section import section_picture
from habitat.figures.trials import offsets_picture, species_picture, trial_picture

__all__ = [
    "offsets_picture",
    "profile_picture",
    "save",
    "section_picture",
    "species_picture",
    "station_map",
    "thickness_map",
    "trial_picture",
]
