"""Numeric loops on plain arrays.

In: numpy arrays. Out: numpy arrays. May import: numpy, scipy.
"""
