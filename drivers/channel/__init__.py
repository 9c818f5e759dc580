"""What the loopback does to the bits on their way: one file for each family of channel models.

Errors, slips, silences and noise are made, not computed: nothing here knows a formula for a bit error ratio.
"""
