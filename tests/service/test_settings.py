"""Settings: where a value comes from, and what is said about a bad one."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import pytest

from extractor.errors import InputError
from service.settings import ServiceSettings, setting_rows, unknown_variables


def test_arguments_win_over_variables_and_these_over_defaults() -> None:
    """None and an empty variable mean "not given"."""
    environ = {"BELLASSAY_PORT": "9000", "BELLASSAY_DATA": "/srv/fog", "BELLASSAY_HOST": "",
               "BELLASSAY_LEASE_S": " 45.5 "}
    settings = ServiceSettings.load(environ, port=9001, host=None)
    assert (settings.port, settings.data, settings.host) == (9001, Path("/srv/fog"), "127.0.0.1")
    assert settings.lease_s == 45.5
    assert ServiceSettings.load({}) == ServiceSettings()


def test_key_files_lie_in_the_data_folder_unless_named() -> None:
    """A credential handed over by the operator takes their place."""
    assert ServiceSettings(data=Path("/d")).master_key_path == Path("/d/keys/master.key")
    assert ServiceSettings(data=Path("/d")).ledger_key_path == Path("/d/keys/ledger.key")
    given = ServiceSettings.load({"BELLASSAY_MASTER_KEY_FILE": "/run/credentials/master"})
    assert given.master_key_path == Path("/run/credentials/master")


def numbers() -> list[dataclasses.Field]:
    return [item for item in dataclasses.fields(ServiceSettings) if item.metadata["low"] is not None]


@pytest.mark.parametrize("item", numbers(), ids=lambda item: item.name)
def test_each_number_has_limits_on_both_sides(item: dataclasses.Field) -> None:
    """Just outside is refused and the setting is named; text that is no number is refused with its variable."""
    variable = "BELLASSAY_" + item.name.upper()
    for text in (str(item.metadata["low"] - 1), str(item.metadata["high"] + 1), "many", "nan", "inf", "1e", "true"):
        with pytest.raises(InputError, match=item.name) as caught:
            ServiceSettings.load({variable: text})
        assert caught.value.code == "bad-setting"
    with pytest.raises(InputError, match=item.name):
        ServiceSettings.load({}, **{item.name: True})


@pytest.mark.parametrize("item", numbers(), ids=lambda item: item.name)
def test_the_limits_themselves_are_allowed(item: dataclasses.Field) -> None:
    """Unless another setting stands against it, which is then named too."""
    free = {"heartbeat_s": {"lease_s": 3600.0}, "lease_s": {"heartbeat_s": 0.1}}.get(item.name, {})
    for value in (item.metadata["low"], item.metadata["high"]):
        assert getattr(ServiceSettings.load({}, **free | {item.name: value}), item.name) == value


@pytest.mark.parametrize("given, names", [
    ({"heartbeat_s": 20.0}, "heartbeat_s.*lease_s"), ({"partial_rounds": 2**20 + 1}, "partial_rounds"),
    ({"ledger_origin": "two words"}, "ledger_origin"), ({"ledger_origin": "a+b"}, "ledger_origin"),
    ({"ledger_origin": "x" * 201}, "ledger_origin"), ({"log_level": "loud"}, "log_level"), ({"host": 5}, "host"),
    ({"host": "x" * 256}, "host"), ({"port": 80.5}, "port"), ({"colour": "red"}, "colour"),
])
def test_values_that_cannot_be_are_refused_by_name(given: dict, names: str) -> None:
    """Contradictions between settings, impossible names, wrong kinds, settings that do not exist."""
    with pytest.raises(InputError, match=names) as caught:
        ServiceSettings.load({}, **given)
    assert caught.value.code == "bad-setting"


def test_a_variable_injected_by_a_cluster_is_explained() -> None:
    """A service named bellassay makes some clusters set BELLASSAY_PORT to an address."""
    with pytest.raises(InputError, match="BELLASSAY_PORT.*service links"):
        ServiceSettings.load({"BELLASSAY_PORT": "tcp://10.0.0.7:8383"})


def test_misspelt_variables_can_be_told() -> None:
    """Client variables and settings are known, others are named."""
    environ = {"BELLASSAY_PROT": "1", "BELLASSAY_PORT": "1", "BELLASSAY_URL": "x", "BELLASSAY_TOKEN": "x", "HOME": "/"}
    assert unknown_variables(environ) == ["BELLASSAY_PROT"]


def test_every_setting_is_documented() -> None:
    """Name, variable, limits and meaning of each, for the help page."""
    rows = setting_rows()
    assert len(rows) == len(dataclasses.fields(ServiceSettings)) and all(row["meaning"] for row in rows)
    assert {"name": "port", "variable": "BELLASSAY_PORT", "default": "8383", "unit": "", "limits": "0 .. 65535",
            "meaning": "port the HTTP server listens on; 0 = any free one"} in rows
