"""What a mutation tester needs to hold the roll and splice rules to account.

Belongs here: its settings, a quick test of one mutant, and the survivors with their reasons. Does not belong here: what
the tester prints.
"""
