"""The worked steps of a calculation: enough for an auditor with a hand calculator to follow it.

Steps are worked out anew from the values they state, by the formula they state; ``where`` names the number of
the answer that must come out.
"""
