"""Scans: folding shots into them, choosing their axes, laying them out as labelled arrays."""
