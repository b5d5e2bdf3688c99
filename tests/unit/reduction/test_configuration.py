"""Configurations in force."""

import numpy as np
import pytest

from service.domain.errors import WrongValues
from service.domain.settings import Configuration, ConfigurationTime
from service.reduction.configuration import configuration_in_force

CLEAN, FLAPS = Configuration("clean"), Configuration("flaps")


def test_the_first_configuration_holds_when_nothing_is_said() -> None:
    assert configuration_in_force(np.arange(3.0), (CLEAN, FLAPS), ()).tolist() == [0, 0, 0]


def test_a_change_holds_from_its_instant_on() -> None:
    changes = (ConfigurationTime(4.0, "clean"), ConfigurationTime(2.0, "flaps"))  # order does not matter
    indices = configuration_in_force(np.arange(6.0), (CLEAN, FLAPS), changes)
    assert indices.tolist() == [0, 0, 1, 1, 0, 0]


def test_of_two_changes_at_one_instant_the_later_named_holds() -> None:
    changes = (ConfigurationTime(1.0, "clean"), ConfigurationTime(1.0, "flaps"))
    assert configuration_in_force(np.array([1.0]), (CLEAN, FLAPS), changes).tolist() == [1]


def test_of_two_configurations_with_one_name_the_first_counts() -> None:
    changes = (ConfigurationTime(0.0, "flaps"),)
    assert configuration_in_force(np.array([1.0]), (CLEAN, FLAPS, FLAPS), changes).tolist() == [1]


def test_an_unknown_name_is_the_clients_mistake_and_says_where() -> None:
    with pytest.raises(WrongValues) as raised:
        configuration_in_force(np.arange(2.0), (CLEAN,), (ConfigurationTime(0.0, "clean"), ConfigurationTime(1.0, "x")))
    assert list(raised.value.errors) == ["/settings/configuration_times/1/name"]


def test_empty_series_and_no_configurations() -> None:
    assert configuration_in_force(np.empty(0), (CLEAN,), ()).shape == (0,)
    assert configuration_in_force(np.arange(2.0), (), ()).tolist() == [0, 0]
