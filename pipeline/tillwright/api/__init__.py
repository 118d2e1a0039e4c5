"""For researchers: a frame in, a frame out.

Polars, pandas or Arrow frames in, Polars frames out; nothing is read from or written to a disk.
"""
