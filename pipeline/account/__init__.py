"""What a run amounts to: how its time went, how fast, how near the limits, how good its choices were.

A run goes in, small records and arrays come out; the report and the plots show them.
"""
