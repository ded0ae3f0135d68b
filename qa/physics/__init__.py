"""Pure functions of arrays: water, pulses, beams, hits, echoes, rays, uncertainty, ground.

Nothing in here reads a file, knows a log or registers itself. Every function takes numbers or
arrays of any shapes that broadcast together, in SI units with angles in degrees, and returns
arrays. NaN means not known and comes out as NaN. Where all arrays given are float32, so is the
result; everything else is computed in float64.
"""

from __future__ import annotations
