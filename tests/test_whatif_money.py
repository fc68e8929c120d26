"""How money may be said."""

import pytest

from cohortflow.errors import CallError
from cohortflow.projector import value
from cohortflow.whatif.money import as_money
from tests.projector_cases import CHAIN
from tests.whatif_cases import MONEY, START


def test_a_value_its_terms_and_its_keywords_are_the_same():
    worth = value(CHAIN, start=START, **MONEY)
    for given in (worth, worth.terms, MONEY):
        terms = as_money(given, CHAIN.schedule).terms
        assert terms.factor == pytest.approx(1.1 ** (-1 / 12)) and terms.per_period.tolist() == [
            4,
            20,
            0,
            0,
            0,
        ]
    assert as_money(MONEY, CHAIN.schedule).currency == as_money(worth, CHAIN.schedule).currency == "GBP"
    money = as_money(MONEY, CHAIN.schedule)
    assert as_money(money, CHAIN.schedule) is money and as_money(None, CHAIN.schedule).terms is None


def test_what_is_no_money_is_refused():
    with pytest.raises(CallError, match="or a mapping with the keywords of cf.value; got int"):
        as_money(3, CHAIN.schedule)
    with pytest.raises(CallError, match='value takes no "discount" .did you mean "discount_rate"'):
        as_money({"per_period": {}, "discount": 0.1}, CHAIN.schedule)
    with pytest.raises(CallError, match='value needs "per_period"'):
        as_money({"timing": "end"}, CHAIN.schedule)
