"""Locate room. Enters: a stack of images and a plate. Leaves: a placement and a region of voxels per vial.
Knows nothing of signal models.
"""
