"""The pytest plugin: the same cases, and a team's own beside them, under plain pytest.

    pytest --pyargs protobench.suite --link run:./my-module

A case is any test that takes the fixture ``bench``; one without the ``case`` decorator is judged too, it only has
no clauses. Verdicts map to pytest's outcomes: fail, inconc and error fail the test, with the word in front; what
does not apply is skipped, with the item that says so.
"""

from __future__ import annotations

import dataclasses
import inspect
from collections.abc import Iterator
from typing import TYPE_CHECKING, cast

import pytest

if TYPE_CHECKING:
    from protobench.suite.bench import Bench
    from protobench.suite.case import CaseInfo
    from protobench.suite.session import Session


def pytest_addoption(parser: pytest.Parser) -> None:
    group = parser.getgroup("protobench", "judging a module by the protobench suite")
    group.addoption("--link", help="link to the module; without it an emulated one in virtual time is judged")
    group.addoption("--address", type=int, help="the module's address; without it a probe finds the only one")
    group.addoption(
        "--bench-seed", type=int, default=1, help="seed of everything random in the bench (default 1)"
    )
    group.addoption("--attended", action="store_true", help="someone stands by: hardware may be moved")


@pytest.fixture(scope="session")
def bench_session(request: pytest.FixtureRequest) -> Iterator[Session]:
    """The link to the module, for all cases of the run."""
    # Imported here: the plugin is loaded by every run of pytest in this environment, the bench by few.
    from protobench.suite.options import RunOptions  # noqa: PLC0415
    from protobench.suite.session import Session  # noqa: PLC0415

    config = request.config
    options = RunOptions(
        link=config.getoption("--link"),
        address=config.getoption("--address"),
        seed=config.getoption("--bench-seed"),
        attended=config.getoption("--attended"),
    )
    with Session(options) as session:
        yield session


@pytest.fixture
def bench(bench_session: Session) -> Bench:
    """What a case works with; preamble and postamble are the plugin's."""
    return bench_session.bench


@pytest.hookimpl(tryfirst=True)
def pytest_pyfunc_call(pyfuncitem: pytest.Function) -> bool | None:
    """Judge a test that takes ``bench`` as a case."""
    session = cast("Session | None", pyfuncitem.funcargs.get("bench_session"))
    if session is None or "bench" not in pyfuncitem.funcargs:
        return None
    record = session.judge(_info(pyfuncitem))
    if record.verdict == "not_applicable":
        pytest.skip(record.reason)
    if record.verdict != "pass":
        if not record.clauses:
            link, seed = session.bench.port.link.name, session.options.seed
            record.replay = f"pytest {pyfuncitem.nodeid} --link {link!r} --bench-seed {seed}"
        words = f"{record.verdict}: {record.reason}\n{record.detail}\nagain: {record.replay}"
        pytest.fail(words, pytrace=False)
    return True


def _info(item: pytest.Function) -> CaseInfo:
    """The case as registered, or one made from the test's name; it is called with the test's own arguments."""
    from protobench.judge import Failed  # noqa: PLC0415
    from protobench.suite.case import CaseInfo  # noqa: PLC0415

    arguments = {name: item.funcargs[name] for name in inspect.signature(item.obj).parameters}

    def call(bench: Bench) -> None:
        try:
            item.obj(**{**arguments, "bench": bench})
        except AssertionError as error:  # a team's own case may judge by assert; one of the suite does not
            raise Failed(f"assertion: {error}") from error

    known: CaseInfo | None = getattr(item.function, "case_info", None)
    if known is not None:
        return dataclasses.replace(known, function=call)
    purpose = (item.function.__doc__ or item.name).strip().splitlines()[0]
    return CaseInfo(item.name, "required", "valid", purpose, (), "", call)
