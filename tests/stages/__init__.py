"""Tests of the stages, on small deliveries written for them."""
