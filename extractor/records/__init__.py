"""Round files in, checked and packed bit planes out.

Start at `rounds.open_rounds`; `planes` holds the stored form and the digest.
"""
