"""Numeric kernels: arrays and pre-drawn random numbers in, arrays out.

Fixed axis letters name the arrays: ``r`` draw, ``c`` combination, ``e`` entity, ``t`` session,
``k`` alert type, ``v`` event, ``g`` peer group, ``w`` 64-session word. Ranges are half-open.
Nothing here imports the rest of the package, pandas or a random generator.
"""
