"""The version of nightfold, kept with every fit."""

__version__ = "0.1.0"
