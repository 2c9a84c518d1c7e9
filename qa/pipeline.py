"""The whole of an ingest on one page: intake -> locate -> fit -> measure -> store -> judge."""
