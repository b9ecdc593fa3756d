"""glidefit: numbers that stand up, from gliding motility assays."""

__version__ = "0.1.0"
