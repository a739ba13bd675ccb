"""A second, slow telling of the roll and splice rules, and values from outside.

Belongs here: what the craft is checked against. Does not belong here: anything imported from it by the craft.
"""
