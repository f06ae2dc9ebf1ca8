"""Material constants, reference tables and the demo scenario."""
