"""All compiled code of the motion room: floats and arrays only, no objects, no exceptions.

Imports numpy and numba alone. Each kernel returns a status instead of raising;
``ngbound.motion.propagate`` turns it into a sentence. The layout of the tables a kernel reads
stands in ``layout.py``.
"""
