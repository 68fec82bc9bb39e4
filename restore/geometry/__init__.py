"""Pure functions and small frozen values on float64 arrays: no files, no printing.

One convention for all of it: the component axis is last, `(..., 3)` for vectors and `(..., 4)` for
quaternions; angles are radians inside and degrees wherever a name ends in `_deg`; vectors are unit
vectors with x towards 0N 0E, y towards 0N 90E and z towards the north pole.
"""
