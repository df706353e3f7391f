"""A pulse taken apart: an ideal shape, and the imperfections that make the real one of it.

`shapes` has the ideal families, `parts` the imperfections and how they go together, `dissection`
finds them in an envelope, `lines` what stands beside the pulse in its spectrum, `refinement` the
least squares.
"""
