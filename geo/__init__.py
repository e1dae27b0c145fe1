"""Geometry of a boundary on a map: projection, outline, signed distance, segments, boundary points.

Imports nothing of ours and nothing from the screens or the study file; it speaks in coordinate arrays.
"""
