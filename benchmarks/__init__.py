"""Benchmarks: what midspan costs, each figure as a ratio to a floor measured in the same run. Nothing here asserts a
time.
"""
