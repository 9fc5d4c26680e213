"""Openings in the wall: what they are, and how their rims are cut into the mesh."""
