"""Configurations that cannot be, and what is kept in files."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from module_driver import Driver, number_of
from pydantic import ValidationError

from emulator.config import ConfigError, ModuleConfig, MotionConfig
from emulator.storage import FileStorage, StorageError, WriteFailed

MOTION = {"typical_ms": 10, "longest_ms": 20}
WRONG: list[tuple[dict[str, Any], str]] = [
    ({"address": 0xF0000000}, "address"),
    ({"sessions": 3}, "sessions"),
    ({"numbers": 33}, "numbers"),
    ({"outcomes": 3}, "outcomes"),
    ({"faults": 7}, "faults"),
    ({"queue": 0}, "capability queue and its size 0 contradict each other"),
    ({"capabilities": ("queue", "flight")}, "'flight'"),
    ({"receipt_delay_us": 10_000}, "receipt_delay_us 10000"),
    ({"turnaround_us": 501}, "receipt_delay_us 500"),
    ({"starting_ms": 51}, "starting_ms"),
    ({"temperatures": (3001,)}, "temperatures"),
    ({"temperatures": (1,) * 5}, "temperatures"),
    ({"motions": {}}, "motions"),
    ({"motions": {"fly": MOTION}}, "'fly'"),
    ({"motions": {"hop": {**MOTION, "typical_ms": 21}}}, "typical_ms 21 is more than longest_ms 20"),
    ({"motions": {"hop": {**MOTION, "no_return_ms": 10}}}, "no_return_ms 10"),
    ({"motions": {"hop": {**MOTION, "magnitude_max": 1 << 31}}}, "magnitude_max"),
    ({"motions": {"hop": {**MOTION, "magnitude_min": 1}}}, "magnitude_min 1"),
    ({"motions": {"hop": {**MOTION, "halt_category": 3}}}, "halt_category"),
    ({"hardware_id": b"short"}, "hardware_id"),
    ({"wheels": 4}, "wheels"),
]


@pytest.mark.parametrize(("fields", "told"), WRONG, ids=[told for _, told in WRONG])
def test_what_cannot_be_is_refused_and_named(fields: dict[str, Any], told: str) -> None:
    with pytest.raises(ValidationError) as caught:
        ModuleConfig(**fields)
    assert told in str(caught.value)


def test_a_file_is_read(tmp_path: Path) -> None:
    path = tmp_path / "module.toml"
    path.write_text(
        'address = 7\nhardware_id = "a1b2c3d4e5f60718"\n'
        "[motions.hop]\nmagnitude_max = 5\ntypical_ms = 30\nlongest_ms = 40\nno_return_ms = 10\n"
    )
    config = ModuleConfig.load(path)
    assert (config.address, config.hardware_id.hex()) == (7, "a1b2c3d4e5f60718")
    assert config.motions == {
        "hop": MotionConfig(magnitude_max=5, typical_ms=30, longest_ms=40, no_return_ms=10)
    }


@pytest.mark.parametrize(
    ("text", "told"),
    [("address = -1", "address = -1"), ("address = ", "module.toml"), ('hardware_id = "xy"', "module.toml"),
     ("hardware_id = 5", "module.toml"), ("[faces]\nx = 1", "faces")],
)  # fmt: skip
def test_a_file_that_cannot_be_used_names_field_and_value(tmp_path: Path, text: str, told: str) -> None:
    path = tmp_path / "module.toml"
    path.write_text(text)
    with pytest.raises(ConfigError, match=told):
        ModuleConfig.load(path)
    with pytest.raises(ConfigError, match=r"absent\.toml"):
        ModuleConfig.load(tmp_path / "absent.toml")


@pytest.mark.parametrize("address", [-1, 0, 0xF0000000, 1 << 40])
def test_modules_that_are_alike_have_unicast_addresses(address: int) -> None:
    with pytest.raises(ConfigError, match=f"address = {address}"):
        ModuleConfig().at(address)


# ---------------------------------------------------------------- storage


def test_a_module_goes_on_from_its_file(tmp_path: Path) -> None:
    path = tmp_path / "module"
    for epoch in (1, 2, 3):
        driver = Driver(storage=FileStorage.open(path))
        assert driver.engine.epoch == epoch
        assert driver.engine.storage.groups == ((0xF0000001,) if epoch > 1 else ())
        driver.ready()
        driver.accept("set-groups", groups=[0xF0000001])
    driver.accept("de-energize")
    driver.accept("assign-address", hardware_id=driver.engine.config.hardware_id, address=50)
    assert Driver(storage=FileStorage.open(path)).engine.address == 50


def test_a_write_that_was_torn_leaves_the_one_before(tmp_path: Path) -> None:
    path = tmp_path / "module"
    storage = FileStorage.open(path)
    for epoch in range(1, 6):
        storage.write(epoch=epoch)
        newest = max(tmp_path.iterdir(), key=lambda copy: int(b'"serial":%d' % epoch in copy.read_bytes()))
        whole = newest.read_bytes()
        for size in range(len(whole) - 1):
            newest.write_bytes(whole[:size])
            if epoch == 1:
                with pytest.raises(StorageError, match="no sound copy"):
                    FileStorage.open(path)
            else:
                assert FileStorage.open(path).epoch == epoch - 1
        newest.write_bytes(whole)
    assert len(list(tmp_path.iterdir())) == 2


def test_what_is_no_copy_is_not_believed(tmp_path: Path) -> None:
    path = tmp_path / "module"
    FileStorage.open(path).write(epoch=5)
    (copy,) = tmp_path.iterdir()
    for data in (b"", b"\n", b"00000000 {}\n", copy.read_bytes().replace(b"5", b"6"), b"\xff" * 10_000):
        copy.write_bytes(data)
        with pytest.raises(StorageError, match=copy.name):
            FileStorage.open(path)


def test_a_place_that_takes_no_file_is_a_fault_of_the_module(tmp_path: Path) -> None:
    storage = FileStorage.open(tmp_path / "absent" / "module")
    with pytest.raises(WriteFailed, match="absent"):
        storage.write(epoch=1)
    assert storage.epoch == 0
    driver = Driver(storage=storage)
    assert driver.engine.state.fault
    driver.assist("restart", cause=number_of("restart_cause", "commanded"))
    driver.advance(100)
    assert driver.engine.state.fault
