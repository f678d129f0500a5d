"""Compiled arithmetic: arrays in, arrays out, integer codes, no names of the domain.

`compile_policy` is the one way a function gets compiled.  `components` labels and summarises one map of any design.
"""
