"""Tests of Tillwright."""
