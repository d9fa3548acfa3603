"""Maps and curves."""
