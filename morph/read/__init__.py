"""Reading files: hostile bytes end here."""
