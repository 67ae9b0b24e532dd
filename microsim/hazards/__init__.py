"""Hazards: families as data (core), as NumPy formulas (families) and as compiled loops (kernels, vmath)."""
