"""Tests of the kernels: published figures, loop twins and axioms."""
