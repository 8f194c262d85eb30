"""Documents: bytes kept under the SHA-256 of their content, checked whenever they are read."""

import hashlib
import zlib
from collections.abc import Iterable
from itertools import islice

from sqlalchemy import Connection, insert, select

from planner.errors import LogbookConflict, LogbookDamaged
from planner.logbook.tables import Document

COMPRESSION = 6
IN_ONE_QUESTION = 500  # names in one SQL list, under the parameter limit of every SQLite build


def sha256(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def put_documents(connection: Connection, kind: str, contents: Iterable[bytes]) -> list[str]:
    """Store each content that is not there yet, some at a time; returns their hashes in order."""
    names: list[str] = []
    waiting = iter(contents)
    while part := list(islice(waiting, IN_ONE_QUESTION)):
        given = [(sha256(content), content) for content in part]
        held = dict(given)
        known = set(connection.scalars(select(Document.sha256).where(Document.sha256.in_(list(held)))))
        rows = [
            {"sha256": name, "kind": kind, "size": len(content), **_kept(content)}
            for name, content in held.items()
            if name not in known
        ]
        if rows:
            connection.execute(insert(Document), rows)
        names += [name for name, _ in given]
    return names


def _kept(content: bytes) -> dict[str, str | bytes]:
    squeezed = zlib.compress(content, COMPRESSION)
    if len(squeezed) < len(content):
        return {"coding": "zlib", "body": squeezed}
    return {"coding": "plain", "body": content}


def put_document(connection: Connection, kind: str, content: bytes) -> str:
    """Store one content; returns its hash."""
    return put_documents(connection, kind, [content])[0]


def get_document(connection: Connection, name: str) -> bytes:
    """The content named by this hash.

    Raises:
        LogbookConflict: no such document.
        LogbookDamaged: the bytes are not those that were stored.
    """
    row = connection.execute(
        select(Document.coding, Document.size, Document.body).where(Document.sha256 == name)
    ).one_or_none()
    if row is None:
        raise LogbookConflict(f"the logbook has no document {name[:12]}...")
    return opened(name, row.coding, row.size, row.body)


def opened(name: str, coding: str, size: int, body: bytes) -> bytes:
    """The content of a stored document, its hash checked (LogbookDamaged)."""
    content = body
    if coding == "zlib":
        unpacker = zlib.decompressobj()
        try:
            content = unpacker.decompress(body, size + 1)  # never more than was stored
        except zlib.error as error:
            raise LogbookDamaged(f"documents row {name}: cannot be unpacked ({error})") from error
    if len(content) != size or sha256(content) != name:
        raise LogbookDamaged(f"documents row {name}: its bytes do not match its hash")
    return content
