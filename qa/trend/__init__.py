"""To be written by its room."""
