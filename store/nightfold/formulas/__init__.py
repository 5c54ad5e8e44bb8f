"""Expressions of a machine card: read, checked for their units, evaluated with uncertainties."""
