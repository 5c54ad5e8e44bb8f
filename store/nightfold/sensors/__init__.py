"""Readings that belong to no shot: room and coil temperature, pressure, laser power."""
