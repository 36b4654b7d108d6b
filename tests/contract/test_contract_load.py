"""Loading: the contract itself, its look-ups, and what is said of broken files."""

from __future__ import annotations

import shutil
from pathlib import Path

import pydantic as pd
import pytest

from protobench.contract import Contract, load, load_contract, spec_root


def test_the_contract_loads_once(contract: Contract) -> None:
    assert load_contract("1.0") is contract
    assert load_contract("1.0", spec_root()).kinds == contract.kinds
    assert (contract.name, contract.version) == ("Module Command Link", "1.0")
    assert repr(contract) == "<Module Command Link 1.0>"


def test_look_ups(contract: Contract) -> None:
    assert contract.kind("move").code == 0x27
    assert contract.kind_by_code(0x20).name == "halt"
    assert contract.kind("move").field("magnitude").key == 3
    assert contract.kind_range("answer") == (0x40, 0x5F)
    assert contract.frame.kind_ranges.of(0x3D) == "command_private"
    assert contract.frame.kind_ranges.of(0) == "unused"
    assert contract.enum_values("motion")["hop"] == 4
    assert contract.enum_names("outcome")[5] == "lost"
    assert contract.limit("half_frame_bridge").value == 200
    assert contract.drop("crc").number == 5
    assert contract.drop_by_number(12).name == "stale-confirm"
    assert [row.row for row in contract.refusal_rows("malformed")] == ["form", "field"]
    assert contract.fault("watchdog").code == 13
    assert contract.fault_by_code(11).name == "address-conflict"
    assert contract.capability("assist").number == 5
    assert contract.clause("FRM-01").area == "FRM"
    assert {"queue", "ballistic"} <= contract.condition_names
    assert contract.frame.layout.offset("session") == 12


def test_the_refusals_are_the_enumeration_of_receipts(contract: Contract) -> None:
    values = contract.enum_values("refusal")
    assert values["unsupported-version"] == 1
    assert list(values.values()) == sorted({row.number for row in contract.refusals})
    assert contract.enum_names("refusal")[13] == "out-of-range"


@pytest.mark.parametrize(
    ("address", "many", "unicast"),
    [
        (0, False, False),
        (1, False, True),
        (0xEFFFFFFF, False, True),
        (0xF0000000, True, False),
        (0xFFFFFFFD, True, False),
        (0xFFFFFFFE, False, False),
        (0xFFFFFFFF, True, False),
    ],
)
def test_addresses(contract: Contract, address: int, many: bool, unicast: bool) -> None:
    assert contract.is_multicast(address) is many
    assert contract.addresses.is_unicast(address) is unicast


@pytest.mark.parametrize(
    ("look_up", "argument", "message"),
    [
        ("kind", "jump", "no kind 'jump'"),
        ("kind_by_code", 0x1F, "no kind of code 31"),
        ("kind_range", "any", "no kind range 'any'"),
        ("enum_values", "colour", "no enumeration 'colour'"),
        ("enum_names", "colour", "no enumeration 'colour'"),
        ("limit", "patience", "no limit 'patience'"),
        ("drop", "boredom", "no drop reason 'boredom'"),
        ("drop_by_number", 16, "no drop reason of number 16"),
        ("refusal_rows", "no", "no refusal 'no'"),
        ("fault", "rain", "no fault 'rain'"),
        ("fault_by_code", 999, "no fault of code 999"),
        ("capability", "flight", "no capability 'flight'"),
        ("clause", "FRM-99", "no clause 'FRM-99'"),
    ],
)
def test_a_look_up_says_what_was_looked_for(
    contract: Contract, look_up: str, argument: object, message: str
) -> None:
    with pytest.raises(KeyError, match=message):
        getattr(contract, look_up)(argument)


def test_names_within_an_entry_are_looked_up_with_a_message(contract: Contract) -> None:
    with pytest.raises(KeyError, match="move has no field 'speed'"):
        contract.kind("move").field("speed")
    with pytest.raises(KeyError, match="no field 'colour'"):
        contract.frame.layout.offset("colour")
    with pytest.raises(ValueError, match=r"lease_duration is a range, 500\.\.30000"):
        _ = contract.limit("lease_duration").value


def test_nothing_loaded_can_be_changed(contract: Contract) -> None:
    with pytest.raises(pd.ValidationError):
        contract.kind("move").code = 1  # type: ignore[misc]
    with pytest.raises(TypeError):
        contract.limits["x"] = contract.limit("start_lead")  # type: ignore[index]
    with pytest.raises(TypeError):
        contract.enum_values("motion")["fly"] = 9  # type: ignore[index]


def test_an_installed_package_has_its_own_copy(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    package = tmp_path / "site-packages" / "protobench"
    shutil.copytree(spec_root(), package / "_spec")
    monkeypatch.setattr(load, "_PACKAGE", package)
    assert spec_root() == package / "_spec"
    assert load_contract("1.0", spec_root()).version == "1.0"


def test_a_missing_version_names_every_file() -> None:
    with pytest.raises(Exception, match=r"kinds\.toml: cannot be read from .*: No such file") as caught:
        load_contract("9.9")
    assert len(caught.value.problems) == 11  # type: ignore[attr-defined]
