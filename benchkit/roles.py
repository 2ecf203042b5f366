"""Which part of a stage file fills which role of its topology."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from benchkit.files.parts import Part
from benchkit.topologies import Topology


def fill_roles(
    topology: Topology, parts: Mapping[str, Part], mistakes: list[str]
) -> dict[str, str]:
    """The reference in each filled role: by its ``role``, or where its kind leaves no choice.

    Each contradiction goes to ``mistakes`` as one sentence.
    """
    names: dict[str, str] = {}
    without: dict[str, list[str]] = {}
    for reference, part in parts.items():
        if part.role is None:
            without.setdefault(part.kind, []).append(reference)
        else:
            _by_role(reference, part.role, topology, parts, names, mistakes)
    for kind, references in without.items():
        _by_kind(kind, references, topology, names, mistakes)
    # A part whose own mistake is told already may be the one that is missing.
    idle = {part.kind for reference, part in parts.items() if reference not in names.values()}
    mistakes += [
        f"topology {topology.name} needs {_either(role.kinds)} as its {key!r}, and none of the "
        "parts is that"
        for key, role in topology.roles.items()
        if key not in names and role.absent == "required" and not idle & set(role.kinds)
    ]
    return names


def _by_role(
    reference: str, key: str, topology: Topology, parts: Mapping[str, Part],
    names: dict[str, str], mistakes: list[str],
) -> None:  # fmt: skip
    kind, role = parts[reference].kind, topology.roles.get(key)
    fitting = [k for k, r in topology.roles.items() if kind in r.kinds]
    said = f"parts.{reference}.role is {key!r}"
    if not fitting:
        mistakes.append(_no_place(reference, kind, topology))
    elif role is None or kind not in role.kinds:
        why = (
            f"which topology {topology.name} does not have"
            if role is None
            else f"which in topology {topology.name} is {_either(role.kinds)}"
        )
        mistakes.append(f"{said}, {why}: for {with_article(kind)} it must be {_choice(fitting)}")
    elif key in names:
        others = [k for k in fitting if k != key]
        right = f"the other must be {_choice(others)}" if others else "leave the other out"
        mistakes.append(f"{said}, and so is parts.{names[key]}.role: only one can be, {right}")
    else:
        names[key] = reference


def _by_kind(
    kind: str, references: Sequence[str], topology: Topology, names: dict[str, str],
    mistakes: list[str],
) -> None:  # fmt: skip
    """Place the parts of one kind that have no role."""
    places = {k: r for k, r in topology.roles.items() if kind in r.kinds and k not in names}
    required = [k for k, r in places.items() if r.absent == "required"]
    listed = _list([f"parts.{reference}" for reference in references], "and")
    if len(references) == 1 and (len(places) == 1 or len(required) == 1):
        names[required[0] if required else next(iter(places))] = references[0]
    elif not any(kind in role.kinds for role in topology.roles.values()):
        mistakes += [_no_place(reference, kind, topology) for reference in references]
    elif not places:
        taken = [
            f"its {k!r}, which is parts.{names[k]},"
            for k, r in topology.roles.items()
            if kind in r.kinds
        ]
        are = "is" if len(references) == 1 else "are each"
        mistakes.append(
            f"{listed} {are} {with_article(kind)} too many: topology {topology.name} takes one as "
            f"{_list(taken, 'and as')} and no other"
        )
    elif len(references) > len(places):
        mistakes.append(
            f"{listed} are each {with_article(kind)}, which is too many: topology "
            f"{topology.name} takes no more than one as its {_choice(list(places))}"
        )
    else:
        has = "has" if len(references) == 1 else "have"
        mistakes.append(
            f"{listed} {has} no role: for {with_article(kind)} of topology {topology.name} "
            f"it must be {_choice(list(places))}"
        )


def _no_place(reference: str, kind: str, topology: Topology) -> str:
    fits = ", ".join(f"{key} ({' or '.join(r.kinds)})" for key, r in topology.roles.items())
    return (
        f"parts.{reference} is {with_article(kind)}, which topology {topology.name} has no place "
        f"for; its parts are {fits}"
    )


def with_article(kind: str) -> str:
    """A kind of part as it stands in a sentence, such as ``an npn``."""
    return f"{'an' if kind in ('npn', 'n-mosfet') else 'a'} {kind}"


def _either(kinds: Sequence[str]) -> str:
    return " or ".join(map(with_article, kinds))


def _choice(keys: Sequence[str]) -> str:
    return _list([repr(key) for key in keys], "or")


def _list(words: Sequence[str], last: str) -> str:
    return f" {last} ".join(filter(None, [", ".join(words[:-1]), words[-1]]))
