"""Period calendar, value objects, errors.

In: nothing. Out: the small frozen types that every room shares. May import: numpy only.
"""
