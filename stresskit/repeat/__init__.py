"""Finished runs made again and set against each other.

In: run folders. Out: what came out again, what moved, and why. May import: everything below the commands.
"""
