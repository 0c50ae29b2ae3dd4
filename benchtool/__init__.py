"""Two-port Touchstone sweeps in, one measured-vs-target page per device out.

The modules are flat and ordered: each imports only from those above it in the list that DEVELOPERS.md draws.
Import what you need from its own module; nothing is imported here, so that the command line starts light.
"""

__version__ = "0.1.0"
