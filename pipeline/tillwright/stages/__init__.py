"""The stages of a compile, in the order in which tables come to be.

Each module makes the tables of one stage from tables of earlier ones. `sequence` lists them and
decides what need not be done again. Stages know nothing of Prefect or of the command line.
"""
