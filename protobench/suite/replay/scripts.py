"""What a written replay script ends with: is the failure there, is it gone, or did something else happen?"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Sequence

from protobench.judge import CaseVerdict, Failed
from protobench.links import BadAddress, LinkError, NoVirtualTime
from protobench.suite.bench import NoModule
from protobench.suite.options import RunOptions
from protobench.suite.replay.observe import Later, Place, relation, same
from protobench.suite.replay.replaying import Replay
from protobench.suite.replay.trial import numberless, shape
from protobench.suite.run import list_cases
from protobench.suite.session import NeedsAttendance, Session

GONE, THERE, OTHER = 0, 1, 3
WORDS = {GONE: "the failure is gone", THERE: "the failure is there", OTHER: "something else happened"}


def options(link: str | None, address: int, seed: int, *, attended: bool) -> RunOptions:
    """Options of a script: as recorded, unless the command line says otherwise."""
    parser = argparse.ArgumentParser(
        description="Replay a failure: exit status 1 while it is there, 0 when gone."
    )
    parser.add_argument("--link", default=link, help="link to the module")
    parser.add_argument(
        "--address", type=int, help="the module's address; else a probe finds it on another link"
    )
    parser.add_argument("--attended", action="store_true", default=attended, help="someone stands by")
    given = parser.parse_args()
    recorded = address if given.link == link else None
    found = given.address if given.address is not None else recorded
    return RunOptions(link=given.link, address=found, seed=seed, attended=given.attended)


def run(main: Callable[[], int], ends: str = "") -> int:
    """The exit status of a script. ``ends``: what it takes for the failure to be there is that the link ends so."""
    try:
        status = main()
    except (NeedsAttendance, BadAddress, NoVirtualTime, NoModule) as error:
        return _say(OTHER, str(error))
    except (LinkError, CaseVerdict) as error:
        words = f"the link to the module ended: {type(error).__name__}"
        words = words if isinstance(error, LinkError) else str(error)
        is_it = bool(ends) and numberless(words) == numberless(ends)
        return _say(THERE if is_it else OTHER, f"{words}: {error}" if isinstance(error, LinkError) else words)
    return status


def violated(replay: Replay, clause: str, way: str) -> int:
    """Whether watch or model find this clause broken in this way."""
    found = replay.violations()
    for violation in found:
        if shape(violation) == (clause, way):
            return _say(THERE, f"{clause}: {violation.reason}")
    if found:
        return _say(OTHER, f"{found[0].clause}: {found[0].reason}")
    return _say(GONE, f"nothing breaks {clause}")


def differs(replay: Replay, place: Place, name: str, *, wrong: object, sound: object) -> int:
    """Whether what was seen at a place is what was wrong, or what a sound module does."""
    seen = replay.seen().get(place)
    found: object = ("absent" if seen is None else "came") if name == "it" else "absent"
    if seen is not None and name != "it":
        found = seen.fields.get(name, "absent")
    found = found.value if isinstance(found, Later) else found
    words = f"{place[0]} {place[1]}: {name} is {found}; wrong was {wrong}, a sound module has {sound}"
    if same(found, sound):
        return _say(GONE, words)
    if type(found) is type(wrong) and relation(found, sound) == relation(wrong, sound):
        return _say(THERE, words)
    return _say(OTHER, f"{words}; all that was seen there: {seen.fields if seen is not None else 'nothing'}")


def case_again(session: Session, case_id: str, broken: Sequence[str]) -> int:
    """Whether a case fails again by the same clause."""
    (info,) = [info for info in list_cases() if info.id == case_id]
    record = session.judge(info)
    words = f"{case_id} said {record.verdict}" + (f": {record.reason}" if record.reason else "")
    if record.verdict == Failed.verdict.word:
        return _say(THERE if tuple(record.broken[:1]) == tuple(broken[:1]) else OTHER, words)
    return _say(GONE if record.verdict == "pass" else OTHER, words)


def ended(replay: Replay) -> int:
    """The steps were played and the link did not end."""
    del replay
    return _say(GONE, "the link did not end")


def _say(status: int, words: str) -> int:
    sys.stdout.write(f"{WORDS[status]}: {words}\n")
    return status
