"""Site room. Enters: site.toml, plates, recipes, limits, temperatures. Leaves: validated frozen objects.
Knows nothing of DICOM or the database.
"""
