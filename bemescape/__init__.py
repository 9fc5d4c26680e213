"""Escape times of diffusing molecules from measured 3D shapes, by boundary elements."""
