"""The check sequence: a CRC made from its published parameters."""

from __future__ import annotations

import sys
from collections.abc import Callable

import structlog
from crcmod.crcmod import _usingExtension, mkCrcFun

CrcFunction = Callable[[bytes], int]


def make_crc(*, width: int, polynomial: int, initial: int, reflected: bool, final_xor: int) -> CrcFunction:
    """Return a function from bytes to the CRC as an unsigned integer.

    The parameters are those of the usual catalogues: ``polynomial`` without its leading one, ``initial`` the
    register before the first byte. The CRC of no bytes is ``initial ^ final_xor``.
    """
    # crcmod wants the leading one, and gives the start of the register as what it shows after the final XOR.
    crc: CrcFunction = mkCrcFun(
        (1 << width) | polynomial, initCrc=initial ^ final_xor, rev=reflected, xorOut=final_xor
    )
    return crc


def has_extension() -> bool:
    """Whether crcmod found its C extension."""
    return bool(_usingExtension)


def warn_when_slow() -> None:
    """Say loudly when the CRC runs in pure Python, which takes a hundred times longer than in C."""
    if has_extension():
        return
    log = structlog.get_logger()
    if not structlog.is_configured():  # then it would print among the results, on standard output
        log = structlog.wrap_logger(structlog.PrintLogger(sys.stderr))
    log.warning(
        "crcmod has no C extension: check sums are about a hundred times slower, and timing verdicts suffer",
        remedy="install a C compiler and the Python headers, then reinstall crcmod from source",
    )
