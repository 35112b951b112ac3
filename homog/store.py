"""Where the candidates of a run are kept: parts, one Parquet file each, in memory or in a folder.

All parts of a run have one schema: who, verdict, parameters, quantities, misses; text as codes of few words, no
value as null. The schema's metadata say where the numbers come from, each column's what it means. A part is written
whole or not at all and holds nothing that depends on when or by how many workers it was made, so that its bytes are the
same again.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq

from homog.brief import Brief
from homog.columns import COLUMNS, columns_of
from homog.errors import InputError
from homog.files import whole_file, writing
from homog.results import Words

if TYPE_CHECKING:
    import pandas as pd

SCHEMA = 1
"""Version of the layout of parts; a change of names or types of columns that are there raises it."""
TEXT = pa.dictionary(pa.int32(), pa.string())
PLAIN = (pa.bool_(), pa.int64())
RUN, CANDIDATES = "run.json", "candidates"


def schema(brief: Brief, about: Mapping[str, Any]) -> pa.Schema:
    """Return the schema of a brief's parts, with `about` (plain values) in its metadata under `homog`."""
    families = {source.family.id: source.family for source in brief.candidates}
    kinds = {found.kind for found in families.values()}
    fields = {"candidate": (pa.int64(), "number in the brief, from 1"), "family": (TEXT, "family of the unit cell"),
              "meets": (pa.bool_(), "keeps every limit and is not rejected"),
              "misses": (TEXT, "columns whose limits it misses")}  # fmt: skip
    for name in ("verdict", "reasons"):
        fields[name] = (TEXT, COLUMNS[name].meaning)
    for found in families.values():
        for p in found.parameters:
            fields.setdefault(p.column, (TEXT if p.choices else pa.float64(), p.meaning))
    shown = {name for kind in kinds for name in columns_of(kind)}
    for name, column in COLUMNS.items():
        if name in shown:
            kind = TEXT if column.text else pa.int64() if column.whole else pa.float64()
            fields.setdefault(name, (kind, column.meaning))
    for limit in brief.limits:
        fields[f"miss_{limit.column}"] = (pa.float64(), f"by how much it misses: {limit.words}")
    return pa.schema(
        [pa.field(name, kind, metadata={"meaning": words}) for name, (kind, words) in fields.items()],
        metadata={"homog": json.dumps(about, ensure_ascii=False, sort_keys=True)},
    )


def tabled(values: Mapping[str, Any], whole: pa.Schema) -> pa.Table:
    """Return flat arrays and `Words` by name as a table of that schema; a name that is missing is null throughout."""
    count = len(values["candidate"])
    columns = []
    for field in whole:
        given = values.get(field.name)
        if given is None:
            columns.append(pa.nulls(count, field.type))
        elif isinstance(given, Words):
            codes = pa.array(given.codes.astype(np.int32))
            columns.append(pa.DictionaryArray.from_arrays(codes, pa.array(given.words, pa.string())))
        elif field.type == TEXT:
            columns.append(pa.array(np.asarray(given, object), pa.string()).dictionary_encode())
        else:
            columns.append(pa.array(np.ascontiguousarray(given), from_pandas=True).cast(field.type))
    return pa.Table.from_arrays(columns, schema=whole)


def encoded(table: pa.Table) -> bytes:
    """Return a table as the bytes of a Parquet file."""
    sink = pa.BufferOutputStream()
    texts = [field.name for field in table.schema if field.type == TEXT]
    pq.write_table(table, sink, compression="zstd", use_dictionary=texts)
    return bytes(sink.getvalue())


def decoded(data: bytes) -> pa.Table:
    """Return the table that `encoded` made bytes of."""
    return pq.read_table(pa.BufferReader(data), use_threads=False)


def frame(table: pa.Table) -> pd.DataFrame:
    """Return a table as a DataFrame with plain text, NaN where there is no value."""
    plain = pa.schema([f.with_type(pa.string()) if f.type == TEXT else f for f in table.schema])
    found: pd.DataFrame = table.cast(plain).to_pandas()
    return found


class Parts(Protocol):
    """Where the parts of a run go, and which are there."""

    def done(self) -> list[int]:
        """Return the numbers of the parts that are there, in order."""

    def put(self, number: int, data: bytes) -> None:
        """Keep the bytes of a part."""

    def get(self, number: int) -> pa.Table:
        """Return a part that is there."""


class Nowhere:
    """Keeps no part: for a run of which only the shortlist is wanted."""

    def done(self) -> list[int]:
        return []

    def put(self, number: int, data: bytes) -> None:
        pass

    def get(self, number: int) -> pa.Table:
        raise InputError("The candidates of this run were not kept; run it with Memory() or a folder")


class Memory:
    """Keeps parts in memory, some 300 bytes a candidate."""

    def __init__(self) -> None:
        self._parts: dict[int, bytes] = {}

    def done(self) -> list[int]:
        return sorted(self._parts)

    def put(self, number: int, data: bytes) -> None:
        self._parts[number] = data

    def get(self, number: int) -> pa.Table:
        return decoded(self._parts[number])


class Folder:
    """Keeps parts as PLACE/candidates/part-000000.parquet, ...; PLACE/run.json says of which run.

    Raises
    ------
    InputError
        If the place holds parts of another run: another brief, version of the package, or division into parts.
    """

    def __init__(self, place: Path, about: Mapping[str, Any]) -> None:
        self.place, self.parts = place / CANDIDATES, int(about["parts"])
        told = place / RUN
        if told.exists():
            begun = json.loads(told.read_text(encoding="utf-8"))
            for key, words in (("brief_sha256", "of another brief"), ("version", "of another version of this program"),
                               ("schema", "of another layout"), ("sizes", "divided otherwise")):  # fmt: skip
                if begun.get(key) != about[key]:
                    was, now = (str(x)[:12] for x in (begun.get(key), about[key]))
                    raise InputError(f"The run that stopped in '{place}' is {words} ({key} {was}, now {now}); "
                                     "go on with what it was begun with, or remove it")  # fmt: skip
        else:
            with whole_file(told) as temporary:
                temporary.write_text(json.dumps(about, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
        self.place.mkdir(exist_ok=True)
        for path in self.place.glob("*.tmp"):  # half-written by a run that was killed
            path.unlink()

    def path(self, number: int) -> Path:
        """Return where a part goes."""
        return self.place / f"part-{number:06d}.parquet"

    def done(self) -> list[int]:
        """Return the numbers of the parts that are there and can be read."""
        found = []
        for path in sorted(self.place.glob("part-*.parquet")):
            try:
                pq.read_metadata(path)
            except (pa.ArrowInvalid, OSError):  # the machine went down before the disk had it
                path.unlink()
                continue
            found.append(int(path.stem.split("-")[1]))
        return [number for number in found if number < self.parts]

    def missing(self) -> int:
        """Return how many parts are not there yet."""
        return self.parts - len(self.done())

    def put(self, number: int, data: bytes) -> None:
        path = self.path(number)
        temporary = path.with_suffix(".tmp")
        with writing(self.place):
            with open(temporary, "wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            os.replace(temporary, path)

    def get(self, number: int) -> pa.Table:
        return pq.read_table(self.path(number), use_threads=False)

    def size(self) -> int:
        """Return how many bytes the parts take."""
        return sum(path.stat().st_size for path in self.place.glob("part-*.parquet"))


def has_parts(place: Path) -> bool:
    """Say whether a place holds at least one part: something worth going on with."""
    return any((place / CANDIDATES).glob("part-*.parquet"))


def sha256(text: str) -> str:
    """Return the hash of a brief's text, as `sha256sum` prints that of its file."""
    return hashlib.sha256(text.encode()).hexdigest()


@contextmanager
def table_writer(path: Path, whole: pa.Schema, suffix: str) -> Iterator[Any]:
    """Yield a function that appends a table to a file, CSV or Parquet by `suffix`.

    CSV holds seven significant digits, what single precision has; Parquet holds every digit.
    """
    if suffix == ".csv":
        narrow = pa.schema([
            f.with_type(pa.float32() if f.type == pa.float64() else f.type if f.type in PLAIN else pa.string())
            for f in whole
        ])  # fmt: skip
        with pyarrow.csv.CSVWriter(path, narrow) as writer:
            yield lambda table: writer.write_table(table.cast(narrow, safe=False))
    else:
        texts = [field.name for field in whole if field.type in (TEXT, pa.string())]
        with pq.ParquetWriter(path, whole, compression="zstd", use_dictionary=texts) as writer:
            yield writer.write_table


def write_tables(tables: Iterable[pa.Table], whole: pa.Schema, path: Path) -> None:
    """Write tables one after the other into one file, CSV or Parquet by its suffix."""
    with table_writer(path, whole, path.suffix) as append:
        for table in tables:
            append(table)
