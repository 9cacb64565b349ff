"""Lattice-fringe spacings and angles from TEM and STEM pictures, with uncertainties one can defend.

The names listed here are the public face; each is loaded when it is first used, so that importing the package costs
next to nothing.
"""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach_stub(__name__, __file__)

del lazy_loader
