"""Distances to trouble: gain ranges, loop margins, disk margins, stability radii."""
