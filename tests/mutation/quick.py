"""Whether the roll and splice rules, as they stand in the files now, still pass: for one mutant after another.

Belongs here: the order that finds a broken rule soonest, which is drawn cases before worked examples and nothing
loaded that is not needed. Does not belong here: any test that is not in the everyday suite too.
"""

import random
import sys

from tests.property.strategies import wide_case
from tests.reference.agree import differences

CASES = 200
WORKED = (
    "tests/reference/test_roll_rules.py",
    "tests/reference/test_splice_rules.py",
    "tests/reference/test_adjustment.py",
    "tests/reference/test_index_roll.py",
    "tests/property/test_surprise_sessions.py::test_deadline_is_counted_without_the_surprise_until_it_comes",
    "tests/property/test_surprise_sessions.py"
    "::test_forced_roll_is_decided_in_time_and_takes_effect_on_its_day_over_a_surprise",
    "tests/contracts/test_splice.py",
)


def fails(cases: int) -> str | None:
    """The first difference of so many drawn markets and a twentieth as many declared ones; None for none."""
    for seed in range(cases):
        found = differences(*wide_case(seed))
        if found:
            return f"case {seed}: {found[0]}"
    from tests.property.declared_strategies import draw_case
    from tests.reference.declared import declared_differences

    for seed in range(cases // 20):
        chance = random.Random(seed)
        case = draw_case(seed, chance.choice((20, 45, 70, 110)), chance.randint(2, 7), chance.randint(1, 3))
        found = declared_differences(case) if case is not None else []
        if found:
            return f"declared case {seed}: {found[0]}"
    return None


def main(cases: int = CASES) -> int:
    """0 where every drawn case and worked example passes, 1 where one fails."""
    failure = fails(cases)
    if failure:
        sys.stdout.write(failure + "\n")
        return 1
    import pytest

    # The drawn cases have loaded hypothesis already, which pytest remarks on.
    quiet = ("-W", "ignore::pytest.PytestAssertRewriteWarning")
    return int(pytest.main(["-x", "-q", "-p", "no:cacheprovider", *quiet, *WORKED]) != 0)


if __name__ == "__main__":
    sys.exit(main(*(int(text) for text in sys.argv[1:])))
