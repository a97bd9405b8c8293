"""Joint molar-mass averages and dispersity from osmometry, light scattering and viscometry."""

__version__ = "0.1.0"
