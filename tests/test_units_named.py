import pytest

from fleet.workbook.units_named import ACCEPTED, accepted, parted


@pytest.mark.parametrize(
    ("heading", "words", "unit"),
    [
        ("Capacity (tons)", "capacity", "ton"),
        ("Size kWh", "size", "kWh"),
        ("Storage [ton-hours]", "storage", "ton-h"),
        ("Floor area, m²", "floor area", "m2"),
        ("Floor Area (sq ft)", "floor area", "ft2"),
        ("capacity_kw_th", "capacity", "kW"),
        ("capacity_ton_h", "capacity", "ton-h"),
        ("price_per_kwh", "price", "/kWh"),
        ("Energy price EUR/MWh", "energy price", "/MWh"),
        ("Energy price (EUR per MWh)", "energy price", "/MWh"),
        ("Price, ct/kWh", "price", "cent/kWh"),
        ("Dry bulb °F", "dry bulb", "degF"),
        ("Efficiency kW/ton", "efficiency", "kW/ton"),
        ("Peak cooling in MW", "peak cooling", "MW"),
        ("Capacity (see note)", "capacity see note", None),
        ("Hour", "hour", None),
        ("kW", "kw", None),
    ],
)
def test_a_heading_is_parted_into_words_and_unit(heading, words, unit):
    assert parted(heading) == (words, unit)


@pytest.mark.parametrize(
    ("ours", "unit", "value", "expected"),
    [
        ("kW_th", "ton", 100.0, 351.6853),  # 1 ton = 12 000 Btu/h = 3.516853 kW
        ("kW_th", "kBtu/h", 1200.0, 351.6853),  # 100 tons are 1 200 kBtu/h
        ("kWh_th", "ton-h", 1000.0, 3516.853),
        ("kWh_th", "MWh", 2.5, 2500.0),
        ("m2", "ft2", 10.76391, 1.0),
        ("degC", "degF", 95.0, 35.0),
        ("degC", "degF", -40.0, -40.0),
        ("money/kWh", "/MWh", 180.0, 0.18),
        ("money/kWh", "cent/kWh", 18.0, 0.18),
        ("COP", "kW/ton", 0.586142, 6.0),
        ("COP", "EER", 10.0, 2.930711),
        ("min", "h", 2.0, 120.0),
    ],
)
def test_conversions(ours, unit, value, expected):
    assert accepted(ours)[unit].ours(value) == pytest.approx(expected, rel=1e-6)


def test_our_own_unit_is_taken_as_it_stands():
    for ours, units in ACCEPTED.items():
        assert any(one.ours(7.25) == 7.25 for one in units.values()), ours
    assert accepted("kWh/K")["kWh/K"].ours(7.25) == 7.25
