"""Intake room. Enters: DICOM files, folders. Leaves: sessions, their calibrated series, held files with reasons.
Knows nothing of vials or fitting.
"""
