"""Files to documents: reading them, and telling payoff, contract, market and quote apart by their keys."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterable
from pathlib import Path

from mcx.faults import Fault, Place, did_you_mean
from mcx.text.located import Document, Mapping
from mcx.text.scalars import expected, shown
from mcx.text.source import decoded
from mcx.text.yaml12 import SIZE_LIMIT, read_yaml, too_large

TELLING_KEYS = ("contract", "market", "quote")
KINDS = (*TELLING_KEYS, "payoff")


def read_documents(files: Iterable[str | Path]) -> tuple[list[Document], list[Fault]]:
    """Every document of the files, in order; `-` is standard input. A file that cannot be read is a fault."""
    documents: list[Document] = []
    faults: list[Fault] = []
    for file in map(str, files):
        data = _bytes(file)
        if isinstance(data, Fault):
            faults.append(data)
            continue
        found, wrong = parse_documents(data, file)
        documents += found
        faults += wrong
    return documents, faults


def parse_documents(data: bytes, file: str) -> tuple[list[Document], list[Fault]]:
    """The documents in a file's bytes; `file` is the name that its places carry. A CSV file is one document, a table of
    fixings."""
    if file.lower().endswith(".csv"):
        text = decoded(data, file)
        if isinstance(text, Fault):
            return [], [text]
        return [Document("fixings", Mapping((), Place(file, 1, 1)), file, text)], []
    nodes, faults = read_yaml(data, file)
    text = data.decode("utf-8-sig") if nodes else ""
    documents = []
    for node in nodes:
        if not isinstance(node, Mapping):
            wrong = f"expected a document of keys and values, found {shown(node)}"
            faults.append(Fault(node.place, wrong))
            continue
        telling = [key for key in node.keys() if key in TELLING_KEYS]
        if len(telling) > 1:
            first, second = telling[:2]
            faults.append(Fault(node.key(second).place, f"'{second}' cannot stand in one document with '{first}'; "
                                                        "put '---' between two documents"))
            continue
        if not telling and "events" not in node and node.keys()[:1] != ("payoff",):
            faults.append(_of_no_kind(node))
            continue
        documents.append(Document(telling[0] if telling else "payoff", node, file, text))
    return documents, faults


def _of_no_kind(node: Mapping) -> Fault:
    """The fault of a document that is no definition either, at the key that may have been meant to tell."""
    keys = [key for key, _ in node.entries]
    near = [(key, hint) for key in keys if key.text not in KINDS and (hint := did_you_mean(key.text, KINDS))]
    key, hint = near[0] if near else (keys[0] if keys else node, "")
    return expected(f"a document that begins with {', '.join(map(repr, KINDS[:-1]))} or '{KINDS[-1]}'", key,
                    hint.removeprefix("; "))


def _bytes(file: str) -> bytes | Fault:
    """What a file holds, read no further than the limit."""
    try:
        if file == "-":
            data, size = sys.stdin.buffer.read(SIZE_LIMIT + 1), None
        else:
            with open(file, "rb") as stream:
                data = stream.read(SIZE_LIMIT + 1)
                size = os.fstat(stream.fileno()).st_size or None
    except IsADirectoryError:
        return Fault(Place(file, 1, 1), "this is a folder; expected a file")
    except FileNotFoundError:
        return Fault(Place(file, 1, 1), "there is no such file")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "the name is not one of a file"
        return Fault(Place(file, 1, 1), f"the file cannot be read: {reason[:1].lower()}{reason[1:]}")
    return data if len(data) <= SIZE_LIMIT else too_large(file, size)
