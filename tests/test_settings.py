import pytest

from fleet.errors import Refused
from fleet.settings import defaults_used, parse_settings

HEAD = 'name = "Amber Coast Power"\ntimezone = "Europe/Athens"\ncurrency = "EUR"\n'


def messages(text):
    with pytest.raises(Refused) as caught:
        parse_settings(text)
    return [str(problem) for problem in caught.value.problems]


def test_three_lines_are_enough_and_the_rest_has_the_stated_defaults():
    settings = parse_settings(HEAD)
    assert (settings.name, settings.timezone, settings.currency) == (
        "Amber Coast Power",
        "Europe/Athens",
        "EUR",
    )
    assert settings.interval_minutes == 15
    assert settings.notice_minutes == 120
    assert settings.minimum_window_minutes == 60
    assert settings.shortfall_price_per_kwh is None
    assert settings.over_delivery_price_per_kwh is None
    assert settings.over_delivery_fraction == 0.05
    assert (
        settings.capacity_payment_per_kwh == settings.energy_payment_per_kwh == settings.penalty_per_kwh == 0
    )
    assert (settings.performance_floor, settings.performance_cap) == (0, 1)
    assert settings.settlement_rule == "ten_of_ten"
    assert settings.rounding == "half_up"
    assert settings.time_reading("meters") == "offset"


def test_every_default_used_is_listed_and_nothing_that_was_given():
    settings = parse_settings(HEAD + 'notice_minutes = 120\n[tables]\nmeters_time = "local"\n')
    used = {one.name: one.value for one in defaults_used(settings)}
    assert "notice_minutes" not in used
    assert "timezone" not in used
    assert "tables.meters_time" not in used
    assert used["minimum_window_minutes"] == "60.0"
    assert used["shortfall_price_per_kwh"] == "10 x the dearest energy price of the horizon"
    assert used["tables.loads_time"] == "offset"
    assert settings.time_reading("meters") == "local"


def test_rules_of_ones_own_pass_through_as_they_stand():
    settings = parse_settings(HEAD + "[rules.mine]\nlook_back_days = 30\n[rules.mine.deeper]\nx = [1, 2]\n")
    assert settings.rules == {"mine": {"look_back_days": 30, "deeper": {"x": [1, 2]}}}


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (
            "interval_minutes = 15",
            [
                "fleet.toml, column name: came nothing; expected a value; add name = ... to fleet.toml",
                "fleet.toml, column timezone: came nothing; expected a value; add timezone = ... to fleet.toml",
                "fleet.toml, column currency: came nothing; expected a value; add currency = ... to fleet.toml",
            ],
        ),
        (
            HEAD.replace("Athens", "Athen").replace("EUR", "euro"),
            [
                "fleet.toml, column timezone: came 'Europe/Athen'; expected an IANA time zone such as "
                "Europe/Athens; did you mean Europe/Athens?",
                "fleet.toml, column currency: came 'euro'; expected three capital letters (ISO 4217); "
                "give such a value",
            ],
        ),
        (
            HEAD + "notice_minute = 30\nwallpaper = 'red'",
            [
                "fleet.toml, column notice_minute: came 30; expected a setting that is known; "
                "did you mean notice_minutes?",
                "fleet.toml, column wallpaper: came 'red'; expected a setting that is known; "
                "remove it or look at the list of names",
            ],
        ),
        (
            HEAD + "interval_minutes = 7\nnotice_minutes = -1\npenalty_per_kwh = nan",
            [
                "fleet.toml, column interval_minutes: came 7; expected 5, 10, 15, 30 or 60; give such a value",
                "fleet.toml, column notice_minutes: came -1; expected a number greater than or equal to 0; "
                "give such a value",
                "fleet.toml, column penalty_per_kwh: came nan; expected a finite number; give such a value",
            ],
        ),
        (
            HEAD + '[tables]\nmeter_time = "utc"',
            [
                "fleet.toml, column tables: came {'meter_time': 'utc'}; expected a name of node_loads_time, "
                "weather_time, loads_time, tariffs_time, status_time, meters_time; did you mean meters_time?"
            ],
        ),
        (
            HEAD + '[tables]\nmeters_time = "zulu"',
            [
                "fleet.toml, column tables.meters_time: came 'zulu'; "
                "expected 'utc', 'offset', 'local' or 'standard'; give such a value"
            ],
        ),
        (
            HEAD + "performance_floor = 0.9\nperformance_cap = 0.8",
            [
                "fleet.toml: came values that do not go together; expected performance_floor at most "
                "performance_cap; lower the floor or raise the cap"
            ],
        ),
        (
            HEAD.replace("Europe/Athens", "Asia/Kolkata") + "interval_minutes = 60",
            [
                "fleet.toml: came values that do not go together; expected interval_minutes that divide the "
                "offset of Asia/Kolkata (+330 minutes); use 15 or 30 minutes"
            ],
        ),
        (
            HEAD + 'country = "XX"',
            [
                "fleet.toml: came values that do not go together; expected country as a two-letter ISO 3166 "
                "code with known holidays; give a holidays table"
            ],
        ),
        (
            HEAD + 'subdivision = "CA"',
            [
                "fleet.toml: came values that do not go together; expected country together with subdivision; "
                "add country, or remove subdivision"
            ],
        ),
        (
            HEAD + "notice_minutes = ",
            ["fleet.toml, row 4: came Invalid value; expected a TOML file; mend that line"],
        ),
    ],
)
def test_what_is_wrong_is_said_in_full(text, expected):
    assert messages(text + "\n") == expected


def test_settings_cannot_be_changed():
    settings = parse_settings(HEAD)
    with pytest.raises(ValueError, match="frozen"):
        settings.name = "other"
