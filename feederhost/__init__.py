"""Proven PV and EV hosting capacity of radial distribution feeders."""

__version__ = "0.1.0"
