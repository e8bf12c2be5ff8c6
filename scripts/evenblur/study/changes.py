"""What changed in a study and what it did, in the words of the trade."""

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from evenblur.study.history import State
from evenblur.study.state import GONE, MADE_FIELDS, PERIOD, PHANTOM, PROGRAM, SCAN, SETUP, STUDY, TARGET

_FEW = 3
"""As many scans are called by name; more are counted."""
_LONGEST = 40
"""As many setups or periods have a line of their own; more are counted."""

_CODE = {
    "make_demonstration": "the demonstration's generator changed: its images are made again",
    "take_in_image": "intake code changed: every image is taken in again",
    "measure_resolution": "measuring code changed: all {phantoms} phantoms are measured again",
    "make_plan": "planning code changed: the plan is made again",
    "match_kernel": "matching code changed: every kernel is matched again",
    "smooth_scan": "smoothing code changed: all {scans} scans are smoothed again",
    "measure_achieved": "code behind the achieved widths changed: every period's phantoms are measured again",
}


def counted(number: int, word: str) -> str:
    """A number and its noun.

    >>> counted(1, "scan"), counted(14, "scan")
    ('1 scan', '14 scans')
    """
    return f"{number} {word}{'' if number == 1 else 's'}"


def _below(state: State, kind: str) -> dict[str, dict[str, str]]:
    return {item.removeprefix(kind): fields for item, fields in state.items() if item.startswith(kind)}


def _arrow(old: str, new: str) -> str:
    return f"{old or 'nothing'} -> {new or 'nothing'}"


# --- before the work


@dataclass
class _News:
    """What is new about one setup, and which of its phantom sessions it touches (None: all)."""

    said: list[str] = field(default_factory=list)
    sessions: set[str] | None = field(default_factory=set)
    scans: set[str] = field(default_factory=set)

    def touches(self, session: str | None) -> bool:
        return self.sessions is None or session in self.sessions


def before_work(recorded: State, now: State) -> list[str]:
    """What changed in the study's files, images and code since the last recorded state.

    Parameters
    ----------
    recorded
        The state that the history comes to.
    now
        Settings, tables and image identities as they are (`state.study_state` with digests), and the program's code.

    Returns
    -------
    list
        Sentences, none where nothing changed.
    """
    if not recorded:
        counts = [
            counted(len(_below(now, kind)), word)
            for kind, word in ((SETUP, "setup"), (PHANTOM, "phantom"), (SCAN, "scan"))
        ]
        return [f"first run: nothing is recorded of this study yet; it has {', '.join(counts)}"]
    sentences = _program(recorded, now)
    sentences += [f"study.yaml: {name} {_arrow(old, new)}" for name, old, new in _moved(recorded, now, STUDY)]
    news: dict[str, _News] = {}
    _setup_news(recorded, now, news)
    _phantom_news(recorded, now, news)
    _scan_news(recorded, now, news)
    accepted = {name: f for name, f in _below(recorded, SCAN).items() if f.get("status") == "accepted"}
    lines = []
    for setup, what in news.items():
        behind = {
            name
            for name, fields in accepted.items()
            if fields.get("setup") == setup
            and (what.sessions is None or fields.get("phantom_session") in what.sessions)
        }
        follow = len(behind | what.scans)
        lines.append(f"setup {setup}: {'; '.join(what.said)}; {counted(follow, 'scan')} may follow")
    return sentences + _shortened(lines, "setup")


def _moved(recorded: State, now: State, item: str) -> list[tuple[str, str, str]]:
    """Fields of an item that the study's own files give and that changed: name, old, new."""
    old, new = recorded.get(item, {}), now.get(item, {})
    names = [*new, *(name for name in old if name not in new and name not in MADE_FIELDS)]
    return [(name, old.get(name, ""), new.get(name, "")) for name in names if old.get(name, "") != new.get(name, "")]


def _program(recorded: State, now: State) -> list[str]:
    scans = sum(fields.get("status") == "accepted" for fields in _below(recorded, SCAN).values())
    counts = {"scans": scans, "phantoms": len(_below(recorded, PHANTOM))}
    old = recorded.get(PROGRAM, {})
    changed = [name for name, value in now.get(PROGRAM, {}).items() if name in old and old[name] != value]
    sentences = [_CODE[name].format(**counts) for name in _CODE if name in changed]
    if "version" in changed:
        sentences.insert(0, f"program version {_arrow(old['version'], now[PROGRAM]['version'])}")
    return sentences


def _setup_news(recorded: State, now: State, news: dict[str, _News]) -> None:
    before, after = _below(recorded, SETUP), _below(now, SETUP)
    for setup in [*after, *(name for name in before if name not in after)]:
        if setup not in before:
            said = ["new"]
        elif setup not in after:
            said = ["taken out of the tables"]
        else:
            said = [f"{name} {_arrow(old, new)}" for name, old, new in _moved(recorded, now, SETUP + setup)]
        if said:
            news.setdefault(setup, _News()).said += said
            news[setup].sessions = None


def _phantom_news(recorded: State, now: State, news: dict[str, _News]) -> None:
    before, after = _below(recorded, PHANTOM), _below(now, PHANTOM)
    sessions: dict[tuple[str, str], dict[str, str]] = {}
    for label in [*after, *(name for name in before if name not in after)]:
        words = _phantom_words(before.get(label), after.get(label), _moved(recorded, now, PHANTOM + label))
        if words:
            fields = after.get(label) or before[label]
            sessions.setdefault((fields["setup"], fields["phantom_session"]), {})[label] = words
    for (setup, session), told in sessions.items():
        everyone = {
            label
            for label, fields in {**before, **after}.items()
            if (fields["setup"], fields["phantom_session"]) == (setup, session)
        }
        what = news.setdefault(setup, _News())
        alike = set(told.values())
        if len(alike) == 1 and set(told) == everyone:
            what.said.append(f"phantom session {session} {alike.pop()}")
        else:
            what.said += [f"phantom session {session}: {label} {word}" for label, word in told.items()]
        if what.sessions is not None:
            what.sessions.add(session)


def _phantom_words(
    old: Mapping[str, str] | None, new: Mapping[str, str] | None, moved: list[tuple[str, str, str]]
) -> str:
    if old is None:
        return "new"
    if new is None:
        return "taken out of the tables"
    words = []
    for name, was, becomes in moved:
        if name in ("image_sha256", "input_sha256"):
            words.append(_image_word(was, becomes))
        elif name == "use":
            reason = new.get("use_reason")
            out = f"taken out of use{f' ({reason})' if reason else ''}"
            words.append(out if becomes == "no" else "taken into use again")
        elif name not in ("use_reason", "decided_by"):
            words.append(f"{name} {_arrow(was, becomes)}")
    return ", ".join(words)


def _image_word(old: str, new: str) -> str:
    if new in GONE:
        return f"image {new}"
    return "image back" if old in GONE else "replaced"


def _scan_news(recorded: State, now: State, news: dict[str, _News]) -> None:
    before, after = _below(recorded, SCAN), _below(now, SCAN)
    groups: dict[str, dict[str, list[str]]] = {}
    for name in [*after, *(name for name in before if name not in after)]:
        if name not in before:
            words = "new"
        elif name not in after:
            words = "taken out of the tables"
        else:
            words = _phantom_words(before[name], after[name], _moved(recorded, now, SCAN + name))
        if words:
            setup = (after.get(name) or before[name])["setup"]
            groups.setdefault(setup, {}).setdefault(words, []).append(name)
    for setup, told in groups.items():
        what = news.setdefault(setup, _News())
        for words, names in told.items():
            called = f" ({', '.join(names)})" if len(names) <= _FEW else ""
            what.said.append(f"{counted(len(names), 'scan')}{called} {words}")
            what.scans |= set(names) & set(after)


# --- after the plan, and after the work


def after_work(recorded: State, now: State, *, done: bool) -> list[str]:
    """What a plan or a run did to target, kernels and scans.

    Parameters
    ----------
    recorded
        The state before.
    now
        The state that the plan (with `done` False) or the whole run (True) leads to.
    done
        Whether scans were smoothed, or will be.

    Returns
    -------
    list
        Sentences, none where target, widths, kernels and scans are as they were.
    """
    lines = []
    before, after = _below(recorded, PERIOD), _below(now, PERIOD)
    scans = _below(now, SCAN)
    again = _smoothed_again(_below(recorded, SCAN), scans)
    held = _held_words(_below(recorded, SCAN), scans)
    periods: Counter[str] = Counter(f"{scans[name]['setup']}.{scans[name]['phantom_session']}" for name in again)
    for period in [*after, *(name for name in before if name not in after)]:
        said = _period_words(before.get(period), after.get(period))
        if periods[period]:
            verb = "smoothed" if done else "to smooth"
            said.append(f"{counted(periods[period], 'scan')} {verb}{' again' if period in before else ''}")
        if said:
            setup, _, session = period.rpartition(".")
            lines.append(f"setup {setup}, phantom session {session}: {'; '.join(said)}")
    target = _target_words(recorded.get(TARGET, {}), now.get(TARGET, {}))
    moved = recorded.get(TARGET, {}) != now.get(TARGET, {})
    if not lines and not held and not moved:
        return []
    total = f"{counted(len(again), 'scan') if again else 'no scan'} {'smoothed' if done else 'to smooth'}"
    return [f"{target}; {total}", *_shortened(lines, "period"), *held]


def _smoothed_again(before: Mapping[str, Mapping[str, str]], after: Mapping[str, Mapping[str, str]]) -> list[str]:
    watched = ("input_sha256", "kernel_in_plane_mm", "kernel_axial_mm", "output_sha256", "smoothing_version")
    return [
        name
        for name, fields in after.items()
        if fields.get("status") == "accepted"
        and (
            before.get(name, {}).get("status") != "accepted"
            # What a plan cannot know yet (the output's hash) is no change.
            or any(key in fields and before[name].get(key) != fields[key] for key in watched)
        )
    ]


def _period_words(old: Mapping[str, str] | None, new: Mapping[str, str] | None) -> list[str]:
    if new is None:
        return ["no longer there"]
    words = ["new"] if old is None else []
    for key, name in (
        ("measured_in_plane_mm", "in-plane"),
        ("measured_axial_mm", "axial"),
        ("kernel_in_plane_mm", "kernel in-plane"),
        ("kernel_axial_mm", "kernel axial"),
    ):
        was, becomes = (old or {}).get(key, ""), new.get(key, "")
        if was != becomes:
            words.append(f"{name} {millimetres(was, becomes)}")
    if old is not None and old.get("status") != new.get("status"):
        words.append(f"status {_arrow(old.get('status', ''), new.get('status', ''))}")
    return words


def millimetres(old: str, new: str) -> str:
    """Two widths with as many decimals as tell them apart.

    >>> millimetres("5.9031", "6.3011"), millimetres("5.91", "5.93"), millimetres("", "8.0")
    ('5.9 -> 6.3 mm', '5.91 -> 5.93 mm', '8.0 mm')
    """
    if not old or not new:
        return f"{float(old or new):.1f} mm{'' if new else ' -> none'}"
    for decimals in (1, 2, 3, 4):
        first, second = f"{float(old):.{decimals}f}", f"{float(new):.{decimals}f}"
        if first != second:
            break
    return f"{first} -> {second} mm"


def _target_words(old: Mapping[str, str], new: Mapping[str, str]) -> str:
    sides = []
    for key, name in (("in_plane_mm", "in-plane"), ("axial_mm", "axial")):
        was, becomes = old.get(key, ""), new.get(key, "")
        if was != becomes:
            sides.append(f"target {name} {millimetres(was, becomes)}")
    if sides:
        return ", ".join(sides)
    if not new.get("in_plane_mm"):
        return "no target could be set"
    values = {f"{float(new[key]):g} mm" for key in ("in_plane_mm", "axial_mm")}
    both = f"{float(new['in_plane_mm']):g} mm in-plane, {float(new['axial_mm']):g} mm axial"
    return f"target stays {values.pop() if len(values) == 1 else both}"


def _held_words(before: Mapping[str, Mapping[str, str]], after: Mapping[str, Mapping[str, str]]) -> list[str]:
    held: dict[str, list[str]] = {}
    for name, fields in after.items():
        was = before.get(name, {})
        if fields.get("status") == "held" and was.get("reasons") != fields.get("reasons"):
            held.setdefault(fields.get("reasons", ""), []).append(name)
    lines = [
        f"{counted(len(names), 'scan')} now held ({reasons}){': ' + ', '.join(names) if len(names) <= _FEW else ''}"
        for reasons, names in held.items()
    ]
    gone = [name for name in before if name not in after]
    if gone:
        called = f": {', '.join(gone)}" if len(gone) <= _FEW else ""
        lines.append(f"{counted(len(gone), 'scan')} taken out of the tables{called}")
    return lines


def _shortened(lines: Iterable[str], word: str) -> list[str]:
    found = list(lines)
    rest = len(found) - _LONGEST
    return found if rest <= 0 else [*found[:_LONGEST], f"and {counted(rest, word)} more"]
