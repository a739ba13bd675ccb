"""What holds for every market and every plan, tried on random ones.

Every day the same quick examples are tried. With ROPEWALK_LONG=1 in the environment it is many thousands of
new ones, for some twenty minutes.
"""
