"""From one loading's samples and events to numbers: `reduce` afterwards, `OnlineReduction` while it runs.
Pure.
"""
