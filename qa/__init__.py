"""Vialbook: weekly T1/T2 phantom runs taken in, measured, stored, watched for drift and reported.

Data flows one way through the rooms of this package:
site -> intake -> locate -> fit -> measure -> store -> trend / compare -> report, with `qa.pipeline`
as the one page on which an ingest can be read and `qa.cli` as the thin command line over it.
"""

__version__ = "0.1.0"
