"""Relabelling schemes, draws, and the collection of null distributions."""
