"""The numbered stream: entries, their payloads, ring and journal that carry them, and the clock.

entry.py, payloads.py, clock.py, block.py and rundata.py are pure. ring*.py, journal*.py and
files.py own bytes in memory and on disk; they read no clock and decide nothing about the test.
"""
