"""Readers of bench files: input and output only, records out."""
