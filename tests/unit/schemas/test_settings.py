"""Settings: everything is optional, nothing wrong or unknown passes, every fault is pointed at."""

from typing import Any

import pytest

from schemas.settings import load_settings
from service.domain.errors import WrongValues
from service.domain.settings import (
    Aircraft,
    ColumnMeaning,
    Configuration,
    ConfigurationTime,
    ProbeSettings,
    Settings,
    WarningSettings,
    Window,
)

CONTRACT_EXAMPLE = {
    "aircraft": {
        "reference_mass_kg": 6.0,
        "mass_kg": 6.4,
        "mass_uncertainty_kg": 0.1,
        "maximum_bank_deg": 45,
        "configurations": [{"name": "clean", "stall_speed_mps": 11.2, "stall_speed_uncertainty_mps": 0.3}],
    },
    "configuration_times": [{"start_s": 0, "name": "clean"}],
    "probe": {
        "zero_offset_pa": 0.8,
        "zero_offset_uncertainty_pa": 0.5,
        "applied_speed_scale": 1.0,
        "nominal_pressure_scale": 1.0,
        "full_scale_pa": 6900,
    },
    "loiters": [{"start_s": 100, "end_s": 280}],
    "warnings": {"caution_below": 0.3, "warning_below": 0.1, "hold_s": 0.5},
}


def test_the_contracts_example() -> None:
    assert load_settings(CONTRACT_EXAMPLE) == Settings(
        aircraft=Aircraft(6.0, 6.4, 0.1, 45.0, (Configuration("clean", 11.2, 0.3),)),
        configuration_times=(ConfigurationTime(0.0, "clean"),),
        probe=ProbeSettings(0.8, 0.5, 1.0, 1.0, 6900.0),
        loiters=(Window(100.0, 280.0),),
        warnings=WarningSettings(0.3, 0.1, 0.5),
    )


@pytest.mark.parametrize("document", [None, {}])
def test_nothing_given_gives_the_defaults(document: object) -> None:
    assert load_settings(document) == Settings()


def test_columns() -> None:
    given = {"columns": {"Pitot/raw": {"quantity": "impact_pressure", "unit": "hPa"}, "t": {"quantity": "time_s"}}}
    assert load_settings(given).columns == {
        "Pitot/raw": ColumnMeaning("impact_pressure", "hPa"),
        "t": ColumnMeaning("time_s"),
    }


def test_null_is_as_good_as_absent_where_there_is_no_default() -> None:
    assert load_settings({"aircraft": {"mass_kg": None}, "probe": {"zero_offset_pa": None}}) == Settings()


def configuration(**fields: Any) -> dict[str, Any]:
    return {"aircraft": {"configurations": [{"name": "clean", **fields}]}}


WRONG = [
    ([], {""}),
    ("text", {""}),
    ({"colour": 1}, {"/colour"}),
    ({"aircraft": {"wings": 2}}, {"/aircraft/wings"}),
    ({"aircraft": None}, {"/aircraft"}),
    ({"aircraft": {"mass_kg": True}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_kg": "6.4"}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_kg": float("nan")}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_kg": float("inf")}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_kg": 10**400}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_kg": 0}}, {"/aircraft/mass_kg"}),
    ({"aircraft": {"mass_uncertainty_kg": -0.1}}, {"/aircraft/mass_uncertainty_kg"}),
    ({"aircraft": {"maximum_bank_deg": 90}}, {"/aircraft/maximum_bank_deg"}),
    ({"aircraft": {"configurations": {"name": "clean"}}}, {"/aircraft/configurations"}),
    ({"aircraft": {"configurations": [{}]}}, {"/aircraft/configurations/0/name"}),
    ({"aircraft": {"configurations": [{"name": ""}]}}, {"/aircraft/configurations/0/name"}),
    ({"aircraft": {"configurations": [{"name": "a"}, {"name": "a"}]}}, {"/aircraft/configurations/1/name"}),
    ({"aircraft": {"configurations": [{"name": str(i)} for i in range(1001)]}}, {"/aircraft/configurations"}),
    (configuration(stall_speed_mps=0), {"/aircraft/configurations/0/stall_speed_mps"}),
    (configuration(wing_area_m2=1.0), {"/aircraft/configurations/0/lift_coefficient_max"}),
    (configuration(lift_coefficient_max=1.0), {"/aircraft/configurations/0/wing_area_m2"}),
    (
        configuration(stall_speed_mps=11, wing_area_m2=1.0, lift_coefficient_max=1.2),
        {"/aircraft/configurations/0"},
    ),
    ({"configuration_times": [{"start_s": 0, "name": "flaps"}]}, {"/configuration_times/0/name"}),
    ({"probe": {"nominal_pressure_scale": 0}}, {"/probe/nominal_pressure_scale"}),
    ({"probe": {"applied_speed_scale": None}}, {"/probe/applied_speed_scale"}),
    ({"probe": {"zero_offset_uncertainty_pa": -1}}, {"/probe/zero_offset_uncertainty_pa"}),
    ({"loiters": [{"start_s": 5, "end_s": 5}]}, {"/loiters/0/end_s"}),
    ({"loiters": [{"start_s": 5}]}, {"/loiters/0/end_s"}),
    ({"loiters": [{"start_s": 9, "end_s": 20}, {"start_s": 0, "end_s": 10}]}, {"/loiters/0/start_s"}),
    ({"warnings": {"warning_below": 0.4}}, {"/warnings/warning_below"}),
    ({"warnings": {"hold_s": -1}}, {"/warnings/hold_s"}),
    ({"columns": {"a/b": {"unit": "kt"}}}, {"/columns/a~1b/quantity"}),
    ({"columns": {"a": "kt"}}, {"/columns/a"}),
    ({"columns": ["a"]}, {"/columns"}),
]


@pytest.mark.parametrize(("document", "at"), WRONG)
def test_what_is_wrong_is_pointed_at(document: object, at: set[str]) -> None:
    with pytest.raises(WrongValues) as caught:
        load_settings(document)
    assert set(caught.value.errors) == at
    assert all(caught.value.errors.values())


def test_all_faults_are_told_at_once_and_under_their_root() -> None:
    with pytest.raises(WrongValues) as caught:
        load_settings({"probe": {"full_scale_pa": -1, "colour": 0}, "loiters": 3}, at="/settings")
    assert set(caught.value.errors) == {
        "/settings/probe/full_scale_pa",
        "/settings/probe/colour",
        "/settings/loiters",
    }
