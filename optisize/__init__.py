"""Fronts of finished sizings for the input stage of an amplifier, comparator or sensor front end."""

__version__ = "0.1.0"
