"""Atomic writing and validated JSON documents.

A process killed at any instant leaves the old file or the new one, never half of one.
"""

import json
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from hybridtrack.errors import FileFormatError, MissingFileError

Document = TypeVar("Document", bound=BaseModel)


@contextmanager
def replacing(path: Path | str) -> Iterator[Path]:
    """Yield a temporary path beside `path`; on leaving, flush it to disk and rename it over `path`.

    On an exception the temporary file is removed and `path` is left as it was.
    """
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    temporary = target.with_name(f".{target.name}.{os.getpid()}.partial")
    try:
        yield temporary
        with open(temporary, "rb") as handle:
            os.fsync(handle.fileno())
        os.replace(temporary, target)
    finally:
        temporary.unlink(missing_ok=True)


def write_text(path: Path | str, text: str) -> None:
    """Write `text` as UTF-8, atomically."""
    with replacing(path) as temporary:
        temporary.write_text(text, encoding="utf-8")


def write_json(path: Path | str, data: Any) -> None:
    """Write `data` as indented JSON, atomically; NaN and infinity are refused by the encoder."""
    write_text(path, json.dumps(data, indent=1, allow_nan=False) + "\n")


def write_document(path: Path | str, document: BaseModel) -> None:
    """Write a validated document as JSON, unknown fields included, atomically."""
    write_json(path, document.model_dump(mode="json"))


def first_problem(error: ValidationError) -> str:
    """Return "field: requirement, got value" for the first problem that pydantic found."""
    problem = error.errors()[0]
    field = ".".join(str(part) for part in problem["loc"]) or "document"
    requirement = problem["msg"].removeprefix("Value error, ")
    if problem["type"] == "missing":
        return f"field '{field}' is required and missing"
    return f"field '{field}': {requirement}, got {problem['input']!r:.80}"


def parse_document(text: str | bytes, kind: type[Document], source: str, layout: str, version: int = 1) -> Document:
    """Read one JSON document of the given layout.

    Parameters: the JSON text, the pydantic class, the name used in messages, and the expected `format` and major
    `version`. Raises FileFormatError with the field, the requirement and the value received.
    """
    try:
        data = json.loads(text)
    except (json.JSONDecodeError, UnicodeDecodeError) as error:
        raise FileFormatError(f"{source}: expected JSON text, got a syntax error ({error})") from None
    if not isinstance(data, dict):
        raise FileFormatError(f"{source}: expected a JSON object, got {type(data).__name__}")
    if data.get("format") != layout:
        raise FileFormatError(f"{source}: expected format '{layout}', got {data.get('format')!r}")
    received = data.get("version")
    if not isinstance(received, (int, float)) or int(received) != version:
        raise FileFormatError(f"{source}: expected {layout} version {version}, got {received!r}")
    try:
        return kind.model_validate(data)
    except ValidationError as error:
        raise FileFormatError(f"{source}: {first_problem(error)}") from None


def read_document(path: Path | str, kind: type[Document], layout: str, version: int = 1) -> Document:
    """Read a validated JSON document from a file. Raises MissingFileError or FileFormatError."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a {layout} file, found none")
    return parse_document(file.read_bytes(), kind, str(file), layout, version)
