"""The definitions at hand: the shipped ones, one file each in `payoffs/`, and those that the user gives
along.

An installed package holds the folder inside itself; in a checkout it stands beside the package.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from importlib import resources
from importlib.resources.abc import Traversable
from pathlib import Path

from mcx.faults import Fault
from mcx.text.documents import parse_documents
from mcx.text.located import Document, Scalar

FOLDER = "payoffs"
SUFFIX = ".yaml"


def shipped_names() -> tuple[str, ...]:
    """The names of the shipped definitions, sorted."""
    files = (entry.name for entry in _folder().iterdir())
    return tuple(sorted(name.removesuffix(SUFFIX) for name in files if name.endswith(SUFFIX)))


def shipped_text(name: str) -> str:
    """The text of a shipped definition; raises KeyError for any other name."""
    if name not in shipped_names():
        raise KeyError(name)
    return _folder().joinpath(name + SUFFIX).read_text(encoding="utf-8")


def shipped(name: str) -> Document:
    """A shipped definition as a document; raises KeyError for any other name."""
    documents, faults = parse_documents(shipped_text(name).encode(), f"{FOLDER}/{name}{SUFFIX}")
    assert not faults and len(documents) == 1, f"the shipped definition '{name}' is not one sound document"
    return documents[0]


def stands_for_shipped(definition: Document) -> bool:
    """Whether a definition bears the name of a shipped one without being it."""
    name = _name(definition)
    return name is not None and name.text in shipped_names() and definition.text != shipped_text(name.text)


class Definitions(Mapping[str, Document]):
    """Definitions by name, the user's own before the shipped ones; a shipped one is read when it is asked
    for."""

    def __init__(self, own: Iterable[Document] = ()):
        self._own = {name.text: document for document in own if (name := _name(document))}
        self._shipped: dict[str, Document | None] = dict.fromkeys(shipped_names())

    def __getitem__(self, name: str) -> Document:
        if name in self._own:
            return self._own[name]
        if self._shipped[name] is None:
            self._shipped[name] = shipped(name)
        return self._shipped[name]

    def __contains__(self, name: object) -> bool:
        return name in self._own or name in self._shipped

    def __iter__(self) -> Iterator[str]:
        return iter(dict.fromkeys((*self._own, *self._shipped)))

    def __len__(self) -> int:
        return len({*self._own, *self._shipped})


def clashes(own: Iterable[Document]) -> list[Fault]:
    """Definitions of the user that bear one name."""
    seen: dict[str, Scalar] = {}
    faults = []
    for name in filter(None, map(_name, own)):
        if name.text in seen:
            faults.append(Fault(name.place,
                                f"the payoff '{name}' is defined at {seen[name.text].place} already"))
        seen.setdefault(name.text, name)
    return faults


def _name(document: Document) -> Scalar | None:
    """The name that a definition gives itself, None where it is no name."""
    node = document.body.get("payoff")
    return node if isinstance(node, Scalar) and node.text else None


def _folder() -> Traversable:
    inside = resources.files("mcx").joinpath(FOLDER)
    return inside if inside.is_dir() else Path(__file__).parents[2] / FOLDER
