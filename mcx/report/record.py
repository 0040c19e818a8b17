"""Valuation records: everything that a price, or its sensitivities, depend on, so that it can be found again, to the
last bit.

A record is one JSON document: the text of every file and definition with its SHA-256, the request, the versions of all
that computes, the type of the processor, and the results. Its own SHA-256 stands in it, so that a record which was cut
short or edited is noticed. It is written whole or not at all, and never over a file that exists.
"""

from __future__ import annotations

import hashlib
import json
import os
import platform
from collections.abc import Iterator, Mapping
from importlib import metadata
from pathlib import Path

from mcx.faults import Fault, RequestError
from mcx.report.results import Replay
from mcx.text.documents import parse_documents
from mcx.text.located import Document

FORMAT = 1
PACKAGES = ("mcx", "numpy", "numba", "llvmlite", "scipy", "pyyaml", "holidays", "python-dateutil")
CHECKSUM = "sha256"
REQUEST = {  # what a result repeats of its request, by verb
    "price": ("contract", "paths", "seed", "reduction"),
    "greeks": ("contract", "paths", "seed", "reduction", "estimator", "bump", "assets", "spot_moves", "vol_moves"),
    "verify": ("contract", "paths", "seed", "reduction", "solve", "target"),
}
CLOSE = 1e-12  # relative, on another type of processor
# How long it took, how the number of paths was found, and what is worded: sentences change with versions.
NOT_COMPARED = ("seconds", "planned", "target", "reached", "verdict", "leads", "text", "about", "note", "choices",
                "reduction_notes", "warnings", "assumptions", "limits", "cautions", "indicative", "calendar_version")


def environment() -> dict[str, str]:
    """What computes: versions by package, a digest of our own source, the system and the type of the processor."""
    import llvmlite.binding

    found = {"python": platform.python_version(), **{name: _version(name) for name in PACKAGES}, "source": _source()}
    return {**found, "system": platform.system(), "processor": llvmlite.binding.get_host_cpu_name()}


def _source() -> str:
    """A digest of every module of the package."""
    here = Path(__file__).parents[1]
    digest = hashlib.sha256()
    for module in sorted(here.rglob("*.py")):
        digest.update(f"{module.relative_to(here).as_posix()}\n".encode())
        digest.update(module.read_bytes())
    return digest.hexdigest()[:16]


def _version(package: str) -> str:
    try:
        return metadata.version(package)
    except metadata.PackageNotFoundError:
        return "not installed"


def make_record(documents: tuple[Document, ...], results: list[dict], verb: str = "price") -> dict:
    """The record of what a verb found about the documents (definitions of the library included)."""
    texts = {document.file: document.text for document in documents}
    record = {
        "record": FORMAT,
        "inputs": [{"file": file, CHECKSUM: _sha256(text), "text": text} for file, text in texts.items()],
        "verb": verb,
        "request": [{key: result[key] for key in REQUEST[verb]} for result in results],
        "environment": environment(),
        "results": results,
    }
    return {**record, CHECKSUM: _checksum(record)}


def write_record(file: str | Path, record: Mapping) -> None:
    """Writes a record; raises RequestError if the file exists or cannot be written."""
    target = Path(file)
    data = json.dumps(record, indent=1, allow_nan=False, ensure_ascii=False) + "\n"
    check_free(target)
    unfinished = target.with_name(f".{target.name}.{os.getpid()}")
    try:
        with open(unfinished, "x", encoding="utf-8") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(unfinished, target)
    except (OSError, ValueError) as error:
        unfinished.unlink(missing_ok=True)
        raise RequestError(f"{target}: the record cannot be written: {_reason(error)}") from None


def check_free(file: str | Path) -> None:
    """Raises RequestError where a record could not be written: found out before the work, not after."""
    target = Path(file)
    if target.exists() or target.is_symlink():
        raise RequestError(f"{target}: the file exists; a record is never written over another file")
    if not target.parent.is_dir():
        raise RequestError(f"{target}: there is no folder '{target.parent}'")
    if not os.access(target.parent, os.W_OK):
        raise RequestError(f"{target}: nothing can be written in the folder '{target.parent}'")


def read_record(file: str | Path) -> dict:
    """A record whose checksums hold; raises RequestError for any other file."""
    try:
        data = Path(file).read_bytes()
    except (OSError, ValueError) as error:
        raise RequestError(f"{file}: the record cannot be read: {_reason(error)}") from None
    try:
        record = json.loads(data.decode("utf-8"), parse_constant=_no_number)
        json.dumps(record, ensure_ascii=False, allow_nan=False).encode("utf-8")  # no 1e999, no half characters
    except (ValueError, RecursionError):
        raise RequestError(f"{file}: this is no whole valuation record: it may have been cut short") from None
    if not isinstance(record, dict) or "record" not in record:
        raise RequestError(f"{file}: this is no valuation record")
    if record["record"] != FORMAT:
        raise RequestError(f"{file}: the record has format {record['record']!r}; this version reads format {FORMAT}")
    stated = record.pop(CHECKSUM, None)
    if stated != _checksum(record):
        raise RequestError(f"{file}: the record's checksum does not hold: it was cut short or edited since it was "
                           f"written")
    if not _whole(record):
        raise RequestError(f"{file}: the record lacks inputs, requests or results, though its checksum holds")
    return record


def _no_number(text: str) -> None:
    raise ValueError(f"{text} is no number of JSON")


def _whole(record: Mapping) -> bool:
    """Whether everything is there that a replay reads, one request for each result."""
    match record:
        case {"inputs": [*inputs], "request": [*requests], "results": [*results], "environment": {}}:
            verb = record.get("verb", "price")
            asked = {"paths", "seed"} if verb == "price" else {*REQUEST.get(verb, ("no such verb",))}
            return (len(requests) == len(results)
                    and all(isinstance(each, dict) and {"file", "text"} <= each.keys() for each in inputs)
                    and all(isinstance(each, dict) and asked <= each.keys() for each in requests))
    return False


def documents_of(record: Mapping) -> tuple[list[Document], list[Fault]]:
    """The documents that a record holds, under the names of their files, and what this version finds wrong in them."""
    found, faults = [], []
    for each in record["inputs"]:
        documents, wrong = parse_documents(each["text"].encode("utf-8"), each["file"])
        found += documents
        faults += wrong
    return found, faults


def compare(stored: Mapping, results: list[dict], now: Mapping[str, str]) -> Replay:
    """The results of a record against those found now; `now` is the environment."""
    then = stored["environment"]
    changed = tuple(f"{name}: {then.get(name, 'none')} then, {now.get(name, 'none')} now"
                    for name in dict.fromkeys((*then, *now)) if then.get(name) != now.get(name))
    allowed = 0.0 if then.get("processor") == now.get("processor") else CLOSE
    largest, first = 0.0, None
    for name, old, new in differences(stored["results"], results):
        distance = _distance(old, new)
        if isinstance(distance, float):
            largest = max(largest, distance)
        if first is None and (distance is None or distance > allowed):
            first = (name, old, new)
    name, old, new = first or ("", None, None)
    return Replay(first is None, largest, name, old, new, changed)


def differences(old: object, new: object, name: str = "") -> Iterator[tuple[str, object, object]]:
    """Every leaf of two results that is not the same, by its path of keys; lists of different lengths as a whole.

    Only what the old result has: a later version may say more.
    """
    if isinstance(old, dict) and isinstance(new, dict):
        for key in old:
            if key not in NOT_COMPARED:
                yield from differences(old[key], new.get(key), f"{name}.{key}" if name else key)
    elif isinstance(old, list) and isinstance(new, list) and len(old) == len(new):
        for number, (one, other) in enumerate(zip(old, new, strict=True)):
            yield from differences(one, other, f"{name}{_label(one, number)}")
    elif old != new:
        yield name, _shown(old), _shown(new)


def _label(entry: object, number: int) -> str:
    """How a list's entry is called: by its name or date where it has one."""
    if isinstance(entry, dict):
        if {"input", "asset"} <= entry.keys():
            return f"[{entry['input']} {entry['asset']}]"
        if {"name", "asset", "tenor"} <= entry.keys():
            return f"[{' '.join(filter(None, (entry['name'], entry['asset'], entry['tenor'])))}]"
        for key in ("contract", "name", "date", "reading", "step", "asset"):
            if entry.get(key):
                return f"[{entry[key]}]"
    return f"[{number}]"


def _shown(value: object) -> object:
    return value if isinstance(value, int | float | str) or value is None else json.dumps(value, ensure_ascii=False)


def _distance(old: object, new: object) -> float | None:
    """|new - old| / max(1, |old|) for numbers, None for anything else."""
    numbers = all(isinstance(value, int | float) and not isinstance(value, bool) for value in (old, new))
    return abs(new - old) / max(1.0, abs(old)) if numbers else None


def _checksum(record: Mapping) -> str:
    """The SHA-256 of the record without its checksum, keys sorted and no spaces."""
    return _sha256(json.dumps(record, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False))


def _sha256(text: str) -> str:
    return hashlib.sha256(text.encode("utf-8")).hexdigest()


def _reason(error: Exception) -> str:
    reason = getattr(error, "strerror", None) or "the name is not one of a file"
    return f"{reason[:1].lower()}{reason[1:]}"
