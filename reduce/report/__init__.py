"""The report: one HTML page with everything that a reader must see."""
