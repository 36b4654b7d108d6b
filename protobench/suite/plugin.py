"""The pytest plugin: the same cases, and a team's own beside them, under plain pytest.

    pytest --pyargs protobench.suite --link run:./my-module

A case is any test that takes the fixture ``bench``; one without the ``case`` decorator is judged too, it only has
no clauses. Verdicts map to pytest's outcomes: fail, inconc and error fail the test, with the word in front; what
does not apply is skipped, with the item that says so.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest

from protobench.judge import NOT_APPLICABLE
from protobench.suite.bench import Bench
from protobench.suite.case import CaseInfo
from protobench.suite.options import RunOptions
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
    session = _session_of(pyfuncitem)
    if session is None:
        return None
    arguments = {name: pyfuncitem.funcargs[name] for name in pyfuncitem._fixtureinfo.argnames}
    record = session.judge(_info(pyfuncitem, arguments))
    if record.verdict == NOT_APPLICABLE:
        pytest.skip(record.reason)
    if record.verdict != "pass":
        pytest.fail(
            f"{record.verdict}: {record.reason}\n{record.detail}\nagain: {record.replay}", pytrace=False
        )
    return True


def _session_of(item: pytest.Function) -> Session | None:
    if not isinstance(item.funcargs.get("bench"), Bench):
        return None
    session: Session = item._request.getfixturevalue("bench_session")
    return session


def _info(item: pytest.Function, arguments: dict[str, Any]) -> CaseInfo:
    """The case as registered, or one made from the test's name; it is called with the test's own arguments."""
    known: CaseInfo | None = getattr(item.function, "case_info", None)

    def call(bench: Bench) -> None:
        item.obj(**{**arguments, "bench": bench})

    purpose = (item.function.__doc__ or item.name).strip().splitlines()[0]
    if known is None:
        return CaseInfo(item.name, "required", "valid", purpose, (), "", call)
    return CaseInfo(known.id, known.level, known.case_class, known.purpose, known.clauses, known.needs, call)
