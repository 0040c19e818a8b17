"""Files to documents: kinds told by keys, and files that cannot be read."""

from __future__ import annotations

import io
import sys

from mcx.text.documents import parse_documents, read_documents


def test_kinds_are_told_by_keys(tmp_path):
    """contract, market or quote among the top keys says what a document is; else it is a payoff."""
    file = tmp_path / "all.yaml"
    file.write_text("payoff: a\n---\npayoff: b\ncontract: c\n---\nrates: 1\nmarket: 0y\n---\nquote: 3\n---\nevents: 1\n")
    documents, faults = read_documents([file])
    assert faults == []
    assert [document.kind for document in documents] == ["payoff", "contract", "market", "quote", "payoff"]
    assert {document.file for document in documents} == {str(file)}
    assert documents[0].text == file.read_text()


def test_a_document_of_two_kinds():
    """Two telling keys in one document are a missing separator."""
    documents, faults = parse_documents(b"contract: c\nmarket: 0y\n", "f.yaml")
    assert documents == []
    assert [str(fault) for fault in faults] == [
        "f.yaml:2:1: 'market' cannot stand in one document with 'contract'; put '---' between two documents"]


def test_a_document_of_no_kind():
    """A document that no key tells is one fault, at the key that was misspelt, not a list of what a payoff lacks."""
    kinds = "a document that begins with 'contract', 'market', 'quote' or 'payoff'"
    for text, found in (("contrct: Call\npayoff: european\n", "1:1: {}, found 'contrct'; did you mean 'contract'?"),
                        ("rates: {}\nmarkt: 0y\n", "2:1: {}, found 'markt'; did you mean 'market'?"),
                        ("rates: {}\nassets: {}\n", "1:1: {}, found 'rates'"), ("{}\n", "1:1: {}, found a mapping")):
        documents, faults = parse_documents(text.encode(), "f.yaml")
        assert documents == []
        assert [str(fault) for fault in faults] == ["f.yaml:" + found.format(f"expected {kinds}")]


def test_a_document_that_is_no_mapping():
    """A list or a bare text is no document."""
    for text, found in (("- a\n", "a list"), ("hello\n", "'hello'")):
        _, faults = parse_documents(text.encode(), "f.yaml")
        assert [str(fault) for fault in faults] == [
            f"f.yaml:1:1: expected a document of keys and values, found {found}"]


def test_files_that_cannot_be_read(tmp_path):
    """A missing file, a folder, and a file too large each give a fault; the other files are read."""
    large = tmp_path / "large.yaml"
    large.write_bytes(b"#" * 10_000_000)
    good = tmp_path / "good.yaml"
    good.write_text("payoff: a\n")
    missing = tmp_path / "missing.yaml"
    documents, faults = read_documents([missing, tmp_path, large, good, "a\0b"])
    assert len(documents) == 1
    assert [str(fault) for fault in faults] == [
        f"{missing}:1:1: there is no such file",
        f"{tmp_path}:1:1: this is a folder; expected a file",
        f"{large}:1:1: the input has 10,000,000 bytes; at most 1,048,576 bytes (1 MiB) are read",
        "a\0b:1:1: the file cannot be read: the name is not one of a file",
    ]


def test_standard_input(monkeypatch):
    """'-' reads standard input, no further than the limit."""
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(b"payoff: a\n")))
    documents, faults = read_documents(["-"])
    assert (len(documents), faults) == (1, [])
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(b" " * 2_000_000)))
    _, (fault,) = read_documents(["-"])
    assert str(fault) == "-:1:1: the input has more than 1,048,576 bytes (1 MiB), the most that is read"
