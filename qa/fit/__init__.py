"""Fit room. Enters: signals (vials or voxels x samples), times, noise.
Leaves: estimates with covariance, residuals and states.
Knows nothing of DICOM, the database or plates.
"""
