"""Rules as data: presets, search by name, refusals as text, JSON round trip."""

import pytest

from fleet.errors import Refused
from fleet.rules import PRESETS, SettlementRule, rule


def test_presets_carry_the_terms_of_the_trade() -> None:
    assert set(PRESETS) == {
        f"{name}{stream}"
        for name in (
            "ten_of_ten",
            "high_five_of_ten",
            "high_four_of_five",
            "middle_eight_of_ten",
            "weather_matched_days",
            "temperature_regression",
            "maximum_base_load",
            "meter_before_after",
            "three_before_two_after",
        )
        for stream in ("", "_plant")
    }
    ten, high = PRESETS["ten_of_ten"], PRESETS["high_five_of_ten"]
    assert (ten.pool_days, ten.take_days, ten.adjustment, ten.cap_fraction) == (10, 10, "ratio", 0.2)
    # The first three of the four hours before; a two-hour window that starts four hours before.
    assert (ten.adjustment_from_h, ten.adjustment_to_h) == (4.0, 1.0)
    assert (high.adjustment_from_h, high.adjustment_to_h) == (4.0, 2.0)
    assert (high.pool_days, high.take_days, high.rank) == (10, 5, "highest")
    four, middle = PRESETS["high_four_of_five"], PRESETS["middle_eight_of_ten"]
    assert (four.pool_days, four.take_days, four.adjustment, four.cap_fraction) == (5, 4, "additive", None)
    assert (four.adjustment_from_h, four.adjustment_to_h, four.low_usage_fraction) == (4.0, 1.0, 0.25)
    assert (middle.take_days, middle.rank, middle.adjustment, middle.cap_form) == (
        8,
        "middle",
        "ratio",
        "ratio",
    )
    around = PRESETS["three_before_two_after"]
    assert (around.before_h, around.before_buffer_h) == (3.0, 1.0)
    assert (around.after_h, around.after_buffer_h) == (2.0, 1.0)
    nearest = PRESETS["weather_matched_days"]
    assert (nearest.look_back_days, nearest.take_days, nearest.rank) == (90, 4, "nearest_weather")
    plant = PRESETS["ten_of_ten_plant"]
    assert (plant.stream, plant.adjustment) == ("plant", "additive")


@pytest.mark.parametrize("name", PRESETS)
def test_every_preset_says_how_surely_its_source_is_known(name: str) -> None:
    assert "from memory" in PRESETS[name].source
    assert PRESETS[name].pre_charge_guard == (
        "off" if PRESETS[name].adjustment == "none" else "tank_or_plant"
    )


@pytest.mark.parametrize("name", PRESETS)
def test_every_preset_survives_json(name: str) -> None:
    again = SettlementRule.model_validate_json(PRESETS[name].model_dump_json())
    assert again == PRESETS[name]
    assert rule(name) is PRESETS[name]


def test_a_rule_of_ones_own_starts_from_a_preset() -> None:
    own = rule("mine", {"mine": {"based_on": "high_five_of_ten", "adjustment": "additive"}})
    assert (own.name, own.adjustment, own.take_days, own.source) == ("mine", "additive", 5, "")
    ladder = rule("steps", {"steps": {"performance_formula": "ladder", "ladder": [[0.6, 0.25], [0.7, 0.5]]}})
    assert SettlementRule.model_validate_json(ladder.model_dump_json()) == ladder


def test_an_unknown_name_is_refused_with_the_nearest() -> None:
    with pytest.raises(Refused) as caught:
        rule("ten-of-tn")
    assert str(caught.value) == (
        "fleet.toml or sites, column settlement_rule: came 'ten-of-tn'; expected the name of a settlement rule; "
        "nearest: ten_of_ten, ten_of_ten_plant"
    )


def test_every_fault_of_a_rule_is_named_at_once() -> None:
    with pytest.raises(Refused) as caught:
        rule("mine", {"mine": {"based_on": "ten_of_ten", "take_dys": 4, "pool_days": 0}})
    assert str(caught.value).splitlines() == [
        "fleet.toml, column rules.mine.pool_days: came 0; expected Input should be greater than or equal to 1; "
        "correct it in fleet.toml",
        "fleet.toml, column rules.mine.take_dys: came an unknown field; expected a field of a settlement rule; "
        "nearest: take_days",
    ]


def test_fields_that_contradict_each_other_are_refused() -> None:
    with pytest.raises(Refused, match=r"expected take_days is above pool_days; correct it"):
        rule("mine", {"mine": {"pool_days": 5, "take_days": 6}})
    with pytest.raises(Refused, match="more hours before the event than adjustment_to_h"):
        rule("mine", {"mine": {"adjustment": "ratio", "adjustment_from_h": 1.0, "adjustment_to_h": 2.0}})
    with pytest.raises(Refused, match="a ladder with no rungs"):
        rule("mine", {"mine": {"performance_formula": "ladder"}})


def test_a_presets_name_is_not_taken_and_a_base_must_exist() -> None:
    with pytest.raises(Refused, match="came a preset's name; expected a name of its own"):
        rule("other", {"ten_of_ten": {}, "other": {}})
    with pytest.raises(Refused, match=r"rules.mine.based_on: came 'ten_of_tne'; .* nearest: ten_of_ten"):
        rule("mine", {"mine": {"based_on": "ten_of_tne"}})


def test_the_order_of_rounding_follows_the_fields() -> None:
    plain = PRESETS["ten_of_ten"].order_of_rounding
    assert "performance factor unrounded" in plain and "capped at their commitment" not in plain
    other = rule("mine", {"mine": {"cap_intervals": True, "performance_decimals": 2}}).order_of_rounding
    assert other.index("capped at their commitment") < other.index("performance factor rounded half-up to 2")


@pytest.mark.parametrize(
    ("fields", "said"),
    [
        ({"ladder": [[0.7, 0.5], [0.6, 0.25]]}, "the ladder's lower bounds do not rise"),
        ({"ladder": [[0.6, 0.25], [0.6, 0.5]]}, "the ladder's lower bounds do not rise"),
        ({"performance_formula": "ladder"}, "a ladder with no rungs"),
        ({"temperature_knots_c": [20.0, 10.0]}, "temperature_knots_c do not rise"),
        ({"firm_level_charge_per_kwh": 6.0}, "firm_level_charge_per_kwh without firm_level_kw"),
        (
            {"kind": "temperature_regression", "rank": "nearest_weather"},
            "a regression takes its days by recent, highest or middle, not by nearest_weather",
        ),
    ],
)
def test_what_does_not_fit_together_is_told_in_one_sentence(fields: dict[str, object], said: str) -> None:
    with pytest.raises(Refused) as caught:
        rule("mine", {"mine": fields})
    assert str(caught.value) == (
        f"fleet.toml, column rules.mine: came fields that do not fit together; expected {said}; "
        "correct it in fleet.toml"
    )
