"""The error tree and the small helpers that shape its messages."""

import cohortflow.errors as errors


def test_every_error_is_one_of_ours_and_has_its_own_slug():
    classes = [c for c in vars(errors).values() if isinstance(c, type) and issubclass(c, Exception)]
    assert all(issubclass(c, errors.CohortflowError) for c in classes)
    assert len({c.slug for c in classes}) == len(classes)


def test_a_call_error_is_also_a_value_error():
    assert issubclass(errors.CallError, ValueError)


def test_nearest_ignores_case_and_spaces_and_stays_silent_when_nothing_is_close():
    assert errors.nearest(" Cancelled ", ["joined", "cancelled"]) == ' (did you mean "cancelled"?)'
    assert errors.nearest("xyz", ["joined", "cancelled"]) == ""


def test_listed_names_everything_short_and_counts_the_rest():
    assert errors.listed([]) == "none"
    assert errors.listed(["a", "b"]) == '"a", "b"'
    assert errors.listed("abcd", limit=3) == '"a", "b", "c" and 1 more'
