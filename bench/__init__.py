"""Evenarm: bring two interferometer arms to zero optical path difference, and keep the evidence."""

__version__ = "0.1.0"
