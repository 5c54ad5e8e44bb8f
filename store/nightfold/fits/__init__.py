"""Fits: line shapes (``models``), the engine that fits them (``engine``), and what a fit returns."""
