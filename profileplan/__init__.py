"""profileplan plans the motion of Cartesian machines."""

__version__ = "0.1.0"
