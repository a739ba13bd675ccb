"""One module a family of faults, each a set of pure functions over the panel.

Belongs here: finding what is wrong or strange, with its evidence. Does not belong here: altering a price
(`repairs.py`), deciding whether a market may be published.
"""
