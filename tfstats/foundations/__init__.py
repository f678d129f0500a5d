"""What every other room stands on: refusals, axes, units, random streams, adjacency, safe writing of files."""
