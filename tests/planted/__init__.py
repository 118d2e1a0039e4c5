"""A small market whose true inflation is known, made from a seed: what does a compile make of it?"""
