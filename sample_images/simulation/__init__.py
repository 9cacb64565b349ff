"""Simulated electron micrographs whose truth is known: crystals, specimens, microscope, truth.

Shared by ``sample_images/simulate.py`` and ``tests/pictures/simulate.py``. It needs ase, abtem, scipy and tifffile
and nothing of the program whose test material it makes, so agreement with that material is an independent check.

Frames. A picture is an array (row, column), rows down. The specimen's frame is (right, up, towards the viewer) in nm;
the beam runs away from the viewer, the zone axis [uvw] points towards the viewer. A reciprocal vector g is
(row, column) in 1/nm with |g| = 1/d; its direction is counted counter-clockwise from the picture's right.
"""
