"""Whether the roll and splice rules, as they stand in the files now, still pass: for one mutant after another.

Belongs here: the order that finds a broken rule soonest, which is drawn cases before worked examples and nothing
loaded that is not needed. Does not belong here: any test that is not in the everyday suite too.
"""

import sys

from tests.property.strategies import wide_case
from tests.reference.agree import differences

CASES = 1000
WORKED = (
    "tests/reference/test_roll_rules.py",
    "tests/reference/test_splice_rules.py",
    "tests/reference/test_adjustment.py",
    "tests/reference/test_index_roll.py",
    "tests/contracts/test_splice.py",
)


def main() -> int:
    """0 where every drawn case and worked example passes, 1 where one fails."""
    for seed in range(CASES):
        found = differences(*wide_case(seed))
        if found:
            print(f"case {seed}: {found[0]}")
            return 1
    import pytest

    # The drawn cases have loaded hypothesis already, which pytest remarks on.
    quiet = ("-W", "ignore::pytest.PytestAssertRewriteWarning")
    return int(pytest.main(["-x", "-q", "-p", "no:cacheprovider", *quiet, *WORKED]) != 0)


if __name__ == "__main__":
    sys.exit(main())
