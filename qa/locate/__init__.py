"""Locate room.

Enters: a stack of images on one grid (frames, rows, columns), their spacing in mm, and a plate.
Leaves: a `Placement` (rotation, shift, mirror, scale, how sure), or `NotLocated` with a reason; and for a placement one
`Region` of voxels per vial.
Knows nothing of: signal models, times, DICOM, the database. Labels come from the geometry alone.

How: `evidence` (maps of where a vial could be, whatever its contrast) -> `search` (all ways the plate could lie on
them) -> `find` (is the best one good enough, and better than every other labelling?) -> `rims` (to a small part of a
voxel) -> `region` (voxels clear of walls, without bubbles) -> `ringing` (what reaches over the walls all the same).
"""

from qa.locate.find import locate
from qa.locate.placement import NotLocated, Placement, Region
from qa.locate.region import regions
from qa.locate.ringing import calm, independent_voxels

__all__ = ["NotLocated", "Placement", "Region", "calm", "independent_voxels", "locate", "regions"]
