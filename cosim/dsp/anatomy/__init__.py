"""A pulse taken apart: an ideal shape, and the imperfections that make the real one of it.

`shapes` has the ideal families, `parts` the imperfections and how they go together. `dissection`
finds them in an envelope: first the `outline`, then what the `plateau` shows and what leaks beside
the pulse (`leaking`), with the lines of its spectrum (`lines`); `fitting` and `refinement` hold the
least squares.
"""
