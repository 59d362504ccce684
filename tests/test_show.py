"""What people and programs are shown: digits, tables, records."""

import csv
import io
import json
import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mechbench import discovery
from mechbench.contract import IdenticalUnits
from mechbench.engine.estimate import Estimate
from mechbench.market.market import Market
from mechbench.show.figures import change, figure, limits_digits, plus_minus
from mechbench.show.records import FIELDS, harmless, record, to_csv, to_json
from mechbench.show.tables import table


class TestFigures:
    @pytest.mark.parametrize(
        ("value", "error", "shown"),
        [
            (0.48293791, 1e-14, "0.4829"),
            (0.48293791, 0.004, "0.483"),
            (0.48293791, 0.04, "0.48"),
            (0.48293791, 0.4, "0.5"),
            (0.48293791, 4.0, "0"),
            (0.0, 0.0, "0"),
            (0.0, 0.01, "0.00"),
            (1.0, 2e-16, "1"),
            (1.0, 0.01, "1.00"),
            (0.99996, 0.0, "1.000"),
            (0.99996, 0.01, "1.00"),
            (1e-12, 0.0, "1.000e-12"),
            (1e-12, 1e-13, "1.0e-12"),
            (1e-12, 0.01, "0.00"),
            (763.2963, 1e-11, "763.3"),
            (763.2963, 40.0, "760"),
            (763.2963, 400.0, "800"),
            (763.2963, 4000.0, "1,000"),
            (1234567.0, 0.0, "1,235,000"),
            (1.5e12, 0.0, "1.500e12"),
            (3e10, 9e11, "0"),
            (math.inf, math.inf, "infinite"),
            (math.nan, math.nan, "no number"),
            (3.0, math.inf, "not known"),
            (1e-14, 1e-11, "0.0000"),
            (3e-64, 2e-63, "0.0000"),
        ],
    )
    def test_digits(self, value, error, shown):
        """A number shows the digits that its error leaves, and no more than four."""
        assert figure(value, error) == shown

    @given(
        st.floats(1e-290, 1e290),
        st.floats(1e-16, 10.0),
    )
    def test_never_more_digits_than_known(self, value, relative):
        """The last digit shown is no finer than the error, and what is shown lies within one unit of the value."""
        error = value * relative
        shown = figure(value, error).replace(",", "")
        mantissa, _, power = shown.partition("e")
        unit = 10.0 ** (int(power or 0) - len(mantissa.partition(".")[2]))
        told = float(shown)
        if not mantissa.endswith("0") and "." in mantissa:
            assert unit > error / 10.0001
        assert abs(told - value) <= max(0.51 * unit, 10 * error, 0.00051 * value)
        assert len(re.sub(r"^0+", "", re.sub(r"\D", "", mantissa)).rstrip("0")) <= 4

    def test_lower_bound(self):
        """A searched gain is shown as the lower bound that it is."""
        assert figure(0.25, 0.001, "lower bound") == "at least 0.250"

    @pytest.mark.parametrize(
        ("value", "error", "shown"),
        [
            (193.1, 1e-9, "+193.1"),
            (-193.1, 1e-9, "-193.1"),
            (0.0, 1e-12, "0"),
            (-0.001, 0.01, "0.00"),
            (math.nan, math.nan, "no number"),
            (-2e-12, 0.0, "-2.000e-12"),
        ],
    )
    def test_changes_carry_a_sign(self, value, error, shown):
        """A change says its direction, but only where a digit of it is known."""
        assert change(value, error) == shown

    @pytest.mark.parametrize(
        ("error", "shown"),
        [
            (0.0, "0"),
            (0.0041, "0.005"),
            (0.004, "0.004"),
            (0.96, "1"),
            (33.0, "40"),
            (math.inf, "unknown"),
            (7e-14, "< 1e-9"),
        ],
    )
    def test_errors_round_up(self, error, shown):
        """An error has one digit and is never made smaller."""
        assert plus_minus(error) == shown

    @pytest.mark.parametrize(
        ("value", "error", "shown"),
        [
            (0.4829, 7e-14, "< 1e-9"),
            (1.059e-10, 3e-14, "3e-14"),
            (0.0, 7e-14, "< 1e-9"),
            (math.nan, 7e-14, "< 1e-9"),
            (570.2, 1e-7, "1e-7"),
        ],
    )
    def test_errors_below_the_digits(self, value, error, shown):
        """The bound for rounding gives way to the error where the digits beside it are finer than the bound."""
        assert plus_minus(error, value) == shown

    def test_errors_beside_numbers(self):
        """An error is worth showing only where it ends the digits."""
        assert limits_digits(0.48, 0.02)
        assert not limits_digits(0.48, 1e-9)
        assert not limits_digits(0.0, 0.0)
        assert not limits_digits(math.nan, math.nan)


class TestRecords:
    def row(self, **told: object):
        """Make the record of one estimate."""
        family = discovery.family_class("weibull")(shape=1.4, scale=30)
        market = Market(family, 120, IdenticalUnits(12, 8.0), 0.7)
        rule = discovery.mechanism_class("uniform-price")(price_at="last-accepted")
        estimate = Estimate(**{"value": 0.25, "error": 1e-9, "method": "exact"} | told)
        return record(market, rule, "worst_gain", estimate, 0.01)

    def test_fields(self):
        """A record has the fields that the design names, in their order, flat."""
        assert self.row() == {
            "mechanism": "uniform-price(price_at=last-accepted)",
            "family": "weibull",
            "parameters": "shape=1.4, scale=30",
            "bidders": 120,
            "supply": "units=12",
            "reserve": 8.0,
            "turnout": 0.7,
            "measure": "worst_gain",
            "value": 0.25,
            "error": 1e-9,
            "log_error": 0.01,
            "method": "exact",
            "status": "ok",
            "seed": None,
        }
        assert tuple(self.row()) == FIELDS

    def test_json_is_strict(self):
        """A number that is not finite is null in JSON, and the status stays."""
        text = to_json([self.row(value=math.inf, error=math.nan, status="infinite")])
        (back,) = json.loads(text, parse_constant=lambda name: pytest.fail(f"found {name}"))
        assert (back["value"], back["error"], back["status"]) == (None, None, "infinite")

    @pytest.mark.parametrize("text", ["=1+1", "+1", "-cmd", "@sum", "\t=1", "\r=1"])
    def test_no_formulas(self, text):
        """Text from outside that begins like a formula is made text in a spreadsheet."""
        row = self.row() | {"family": text}
        (back,) = csv.DictReader(io.StringIO(to_csv([row])))
        assert back["family"] == "'" + text.strip()
        assert harmless(-0.5) == -0.5

    def test_csv_round_trip(self):
        """Numbers come back from CSV to the last bit."""
        value = 0.1 + 0.2
        (back,) = csv.DictReader(io.StringIO(to_csv([self.row(value=value)])))
        assert float(back["value"]) == value
        assert back["seed"] == ""


class TestTables:
    def test_strings_stay(self):
        """A table leaves digits as they were formatted."""
        assert "1.10" in table(["a", "b"], [["x", "1.10"]], "table")

    def test_markdown_is_escaped(self):
        """A pipe or a tag from outside breaks no Markdown table."""
        text = table(["a", "b"], [["x|y\n<b>", "1"]], "markdown")
        assert "x\\|y \\<b\\>" in text
        assert len(text.splitlines()) == 3

    def test_empty(self):
        """A table without rows is its header."""
        assert "a" in table(["a", "b"], [], "table")
