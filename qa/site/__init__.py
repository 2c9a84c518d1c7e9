"""Site room. Enters: site.toml, plates, recipes, limits, temperatures. Leaves: validated frozen objects.
Knows nothing of DICOM files or the database.

`load_site(folder)` reads it all; `paste` writes the block for what a site does not know yet; `skeleton` a new folder.
"""

from __future__ import annotations

from qa.site.limits import LimitBlock, in_force
from qa.site.load import load_limits, load_plate, load_recipe, load_site
from qa.site.model import Phantom, Scanner, Schedule, Site
from qa.site.plate import Plate, Reference, Vial
from qa.site.recipe import Recipe, Scan

__all__ = [
    "LimitBlock",
    "Phantom",
    "Plate",
    "Recipe",
    "Reference",
    "Scan",
    "Scanner",
    "Schedule",
    "Site",
    "Vial",
    "in_force",
    "load_limits",
    "load_plate",
    "load_recipe",
    "load_site",
]
