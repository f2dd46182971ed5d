"""Exports broken in every way that files break, and passes over each of them together with a good one.

`python -m tests.broken_made FOLDER` makes them, runs a pass over each in this one process and prints a line
of JSON per pass: what became of the files, what the archive holds, which files appeared, the peak memory.
"""

from __future__ import annotations

import gzip
import json
import os
import socket
import sys
import threading
import time
import traceback
import zipfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.intake import take_in
from ingest.ledger import Store
from ingest.readings import read_months
from ingest.unit import ExportRules, Unit
from tests.memory import peak_mb
from tests.units_made import made_instrument, made_unit

ODD_TAGS = ("../../x", "C:\\x", "=cmd()", "two\nlines", "t" * 400)
ASKED = ("FI-1.PV", "FI-2.PV", *ODD_TAGS)
GOOD_ROWS = 60
FIRST = datetime(2026, 4, 1, tzinfo=UTC)  # the good file's times are in March
QUOTE = '"'
HEADER = "time,FI-1.PV,FI-2.PV\n"


def moment(i: int) -> str:
    return (FIRST + timedelta(minutes=i)).strftime("%Y-%m-%dT%H:%MZ")


def rows(count: int, first: int = 0) -> str:
    return "".join(f"{moment(i)},{i}.5,{i % 7}.25\n" for i in range(first, first + count))


SMALL = HEADER + rows(50)
LARGE = HEADER + rows(60_000)  # about 2 MB: more than one block
LONG = "time,tag,value\n"


def table(**columns: Any) -> pa.Table:
    times = pa.array([FIRST + timedelta(minutes=i) for i in range(50)], pa.timestamp("us", "UTC"))
    values = {"FI-1.PV": pa.array(np.arange(50.0)), "FI-2.PV": pa.array(np.ones(50))}
    whole = {"time": times, **values, **columns}
    return pa.table({name: column for name, column in whole.items() if column is not None})


def as_parquet(content: pa.Table, **how: Any) -> bytes:
    sink = pa.BufferOutputStream()
    pq.write_table(content, sink, **how)
    return sink.getvalue().to_pybytes()


def zst(raw: bytes) -> bytes:
    return pa.compress(raw, "zstd", asbytes=True)


def zeros(pack: Callable[[bytes], bytes], mebibytes: int) -> Callable[[Path], object]:
    """A file of zero bytes, compressed in pieces: what follows a piece is another one."""
    piece = pack(bytes(64 << 20))
    return lambda path: path.write_bytes(piece * (mebibytes // 64))


@dataclass(frozen=True)
class Broken:
    """One broken export: its name, how it is made, what becomes of it, what is said, what is rejected."""

    name: str
    make: Callable[[Path], object]
    becomes: str
    says: str = ""
    accepted: int | None = None
    rejected: int = 0
    meanwhile: Callable[[Path], object] | None = None  # done by a thread once reading has begun
    elsewhere: Path | None = None  # what is given to the pass in place of the folder

    def refused(self) -> bool:
        return self.becomes == "set aside"


def content(raw: bytes | str) -> Callable[[Path], object]:
    whole = raw if isinstance(raw, bytes) else raw.encode()
    return lambda path: path.write_bytes(whole)


def aside(name: str, raw: bytes | str, says: str) -> Broken:
    return Broken(name, content(raw), "set aside", says)


def taken(name: str, raw: bytes | str, accepted: int, rejected: int = 0) -> Broken:
    return Broken(name, content(raw), "taken", "", accepted, rejected)


def special(name: str, make: Callable[[Path], object], says: str) -> Broken:
    return Broken(name, make, "set aside", says)


def long_rows(tag: str, count: int = 3) -> str:
    return "".join(f'{moment(i)},"{tag}",{i}.5\n' for i in range(count))


def footer_of_another(path: Path) -> None:
    """Pages of one file under the footer of another that has other columns and lengths."""
    one, other = as_parquet(table()), as_parquet(table(**{"FI-1.PV": pa.array(["12.5 and more"] * 50)}))
    at = other.rindex(b"PAR1") - 4
    length = int.from_bytes(other[at : at + 4], "little")
    at_one = one.rindex(b"PAR1") - 4
    path.write_bytes(
        one[: at_one - int.from_bytes(one[at_one : at_one + 4], "little")] + other[at - length :]
    )


def huge_text_parquet(path: Path) -> None:
    """One text of a mebibyte, a million times by its place in a dictionary: a terabyte from a megabyte."""
    count = 1 << 20
    text = pa.DictionaryArray.from_arrays(pa.array(np.zeros(count, np.int32)), pa.array(["9" * (1 << 20)]))
    times = pa.array(1_775_000_000_000_000 + np.arange(count) * 1_000_000).cast(pa.timestamp("us", "UTC"))
    pq.write_table(pa.table({"time": times, "FI-1.PV": text}), path)


def one_huge_cell_parquet(path: Path) -> None:
    """One cell of 128 MiB that compresses to nothing."""
    texts = pa.array(["1", "0" * (1 << 27), "2"])
    times = pa.array([FIRST + timedelta(minutes=i) for i in range(3)], pa.timestamp("us", "UTC"))
    whole = pa.table({"time": times, "FI-1.PV": texts})
    pq.write_table(whole, path, compression="zstd", use_dictionary=False, write_statistics=False)


def pickled_type_parquet(path: Path) -> None:
    """A column that claims to be an extension type whose description is a pickle that makes a file."""
    mark = path.parent / "made-by-a-pickle"
    bomb = f"cposix\nsystem\n(S'touch {mark}'\ntR.".encode()
    about = {b"ARROW:extension:name": b"arrow.py_extension_type", b"ARROW:extension:metadata": bomb}
    field = pa.field("FI-1.PV", pa.float64(), metadata=about)
    schema = pa.schema([pa.field("time", pa.timestamp("us", "UTC")), field])
    pq.write_table(table(**{"FI-2.PV": None}).cast(schema), path)


def invalid_text(texts: list[bytes]) -> pa.Array:
    """A column of text that is not UTF-8."""
    raw = pa.array(texts, pa.binary())
    return pa.Array.from_buffers(pa.string(), len(texts), raw.buffers())


def xlsx(path: Path) -> None:
    with zipfile.ZipFile(path, "w") as book:
        book.writestr("[Content_Types].xml", "<Types/>")


def listening(path: Path) -> None:
    """A socket; its name is kept short, the system allows 107 bytes."""
    here = Path.cwd()
    os.chdir(path.parent)
    try:
        socket.socket(socket.AF_UNIX).bind(path.name)
    finally:
        os.chdir(here)


def linked(target: str) -> Callable[[Path], object]:
    return lambda path: path.symlink_to(target)


def beside(path: Path) -> Path:
    """Another file that is moved over the first in one step."""
    return path.with_name("replacement")


def replace_it(path: Path) -> None:
    beside(path).write_text(HEADER + rows(10))
    beside(path).replace(path)


def append_on(path: Path) -> None:
    with path.open("a", encoding="utf-8") as file:
        file.write(rows(1, 70_000))


GZ, ZST = gzip.compress(LARGE.encode()), zst(LARGE.encode())
PARQUET = as_parquet(table())
FLIPPED = lambda raw: raw[: len(raw) // 2] + bytes([raw[len(raw) // 2] ^ 0xFF]) + raw[len(raw) // 2 + 1 :]  # noqa: E731
DAMAGED, CUT = "is damaged or cut short", "again"


def _compressed() -> dict[str, Broken]:
    """Files that were cut, flipped, appended to, or that expand beyond all measure."""
    cases: dict[str, Broken] = {}
    for kind, raw in (("gz", GZ), ("zst", ZST)):
        for where, at in (("in its first bytes", 6), ("in the middle", len(raw) // 2), ("at its end", -3)):
            cases[f"{kind} cut {where}"] = aside(f"x.csv.{kind}", raw[:at], f"the {kind} file {DAMAGED}")
        cases[f"{kind} with garbage behind"] = aside(
            f"x.csv.{kind}", raw + b"garbage", f"the {kind} file {DAMAGED}"
        )
        cases[f"text called {kind}"] = aside(f"x.csv.{kind}", SMALL, f"the {kind} file {DAMAGED}")
        cases[f"empty file called {kind}"] = aside(f"x.csv.{kind}", b"", "is empty")
        cases[f"Parquet called {kind}"] = aside(f"x.csv.{kind}", PARQUET, f"the {kind} file {DAMAGED}")
    cases["gz with zeros behind, as tapes pad"] = taken("x.csv.gz", GZ + bytes(512), 120_000)
    cases["gz of two members"] = taken(
        "x.csv.gz", gzip.compress(SMALL.encode()) + gzip.compress(rows(50, 50).encode()), 200
    )
    # zst carries a checksum only where its writer was told so, and Arrow's is not
    cases["gz with a flipped byte"] = aside("x.csv.gz", FLIPPED(GZ), f"the gz file {DAMAGED}")
    cases["gz inside gz"] = aside("x.csv.gz", gzip.compress(GZ), "gz file without")
    cases["gz of 2 GB of zeros"] = special("x.csv.gz", zeros(gzip.compress, 2048), "NUL")
    cases["zst of 2 GB of zeros"] = special("x.csv.zst", zeros(zst, 2048), "NUL")
    return cases


def _parquets() -> dict[str, Broken]:
    """Parquet files damaged, or of columns that hold no readings."""
    cases = {
        f"Parquet cut {where}": aside("x.parquet", PARQUET[:at], f"the Parquet file {DAMAGED}")
        for where, at in (
            ("behind its mark", 4),
            ("in the middle", len(PARQUET) // 2),
            ("at its end", -1),
            ("before its footer's length", -8),
        )
    }
    zeroed = PARQUET[:4] + bytes(300) + PARQUET[304:]
    far = PARQUET[:-8] + (2**31 - 1).to_bytes(4, "little") + b"PAR1"
    return cases | {
        "Parquet zeroed inside": aside("x.parquet", zeroed, f"the Parquet file {DAMAGED}"),
        "Parquet of marks alone": aside("x.parquet", b"PAR1PAR1", f"the Parquet file {DAMAGED}"),
        "Parquet whose footer claims 2 GB": aside("x.parquet", far, f"the Parquet file {DAMAGED}"),
        "Parquet with the footer of another file": special(
            "x.parquet", footer_of_another, f"the Parquet file {DAMAGED}"
        ),
        "empty file called Parquet": aside("x.parquet", b"", "is empty"),
        "Parquet without rows": aside("x.parquet", as_parquet(table().slice(0, 0)), "holds no rows"),
        "Parquet without columns": aside("x.parquet", as_parquet(pa.table({})), "holds no rows"),
        "Parquet that is a terabyte of one text": special("x.parquet", huge_text_parquet, "text"),
        "Parquet of one cell of 128 MiB": special("x.parquet", one_huge_cell_parquet, "text"),
        "Parquet with a pickle for a type": Broken("x.parquet", pickled_type_parquet, "taken", "", 50),
    }


def _odd_columns() -> dict[str, Broken]:
    """Parquet files whose columns hold what is no reading."""
    odd = pa.array([FIRST] * 50, pa.timestamp("us", "UTC")).to_pylist()
    few = pa.array([1.0] * 50)
    return {
        "Parquet with a struct for values": aside(
            "x.parquet",
            as_parquet(table(**{"FI-1.PV": pa.array([{"a": 1.0}] * 50)})),
            "neither numbers nor text",
        ),
        "Parquet with lists for times": aside(
            "x.parquet", as_parquet(table(time=pa.array([[1]] * 50))), "time"
        ),
        "Parquet with a struct that nobody asks for": taken(
            "x.parquet", as_parquet(table(other=pa.array([{"a": [1.0]}] * 50))), 100
        ),
        "Parquet with decimal values": taken(
            "x.parquet", as_parquet(table(**{"FI-1.PV": pa.array([Decimal("1.10")] * 50)})), 100
        ),
        "Parquet with a column of nulls": taken(
            "x.parquet", as_parquet(table(**{"FI-1.PV": pa.nulls(50)})), 50
        ),
        "Parquet with nulls among times": taken(
            "x.parquet",
            as_parquet(table(time=pa.array([None, *odd[1:]], pa.timestamp("us", "UTC")))),
            98 - 96,
            2,
        ),
        "Parquet with yes and no for values": aside(
            "x.parquet",
            as_parquet(table(**{"FI-1.PV": pa.array([True] * 50)})),
            "neither numbers nor text but bool",
        ),
        "Parquet with bytes for values": aside(
            "x.parquet",
            as_parquet(table(**{"FI-1.PV": pa.array([b"1"] * 50)})),
            "neither numbers nor text but binary",
        ),
        "Parquet with a column name that is not UTF-8": aside(
            "x.parquet", PARQUET.replace(b"FI-1.PV", b"\xff\xfe-1.PV"), "UTF-8|utf-8"
        ),
        "Parquet with text that is not UTF-8": aside(
            "x.parquet", as_parquet(table(**{"FI-1.PV": invalid_text([b"\xff\xfe1"] * 50)})), "UTF-8"
        ),
        "Parquet with two columns of one name": aside(
            "x.parquet",
            as_parquet(pa.table([*table().columns, few], ["time", "A", "B", "A"])),
            "more than one column",
        ),
    }


def _odd_values() -> dict[str, Broken]:
    """Parquet files with times, numbers, columns or layers beyond all measure."""
    return {
        "Parquet with times at the ends of all time": taken(
            "x.parquet",
            as_parquet(table(time=pa.array([-(2**63) + 1, 2**63 - 1] * 25).cast(pa.timestamp("ns", "UTC")))),
            0,
            100,
        ),
        "Parquet with times in years beyond four digits": taken(
            "x.parquet",
            as_parquet(table(time=pa.array([2**62, -(2**62)] * 25).cast(pa.timestamp("us", "UTC")))),
            0,
            100,
        ),
        "Parquet with infinities": taken(
            "x.parquet",
            as_parquet(table(**{"FI-1.PV": pa.array([np.inf, -np.inf, 1e308, np.nan, 5e-324] * 10)})),
            80,
            20,
        ),
        "Parquet of 6,000 columns": aside(
            "x.parquet",
            as_parquet(
                pa.table({"time": table()["time"][:1], **{f"T{i}": pa.array([1.0]) for i in range(6000)}})
            ),
            "6001 columns, more than 5000",
        ),
        "Parquet of a column in sixty layers": aside("x.parquet", as_parquet(deep(60)), "x"),
    }


def deep(layers: int) -> pa.Table:
    """A list in a list in a list."""
    column = pa.array([1.0] * 50)
    for _ in range(layers):
        column = pa.ListArray.from_arrays(pa.array(range(51), pa.int32()), column)
    return table(**{"FI-1.PV": column})


def _texts() -> dict[str, Broken]:
    """Text that is none, or whose lines, fields or quotes are broken."""
    middle = LARGE.encode()
    at = middle.index(b"\n", len(middle) * 3 // 4) + 1  # in the second block
    return {
        "empty": aside("x.csv", b"", "is empty"),
        "blank lines only": aside("x.csv", b"\n \r\n\t\n\n", "is empty"),
        "two megabytes of blank lines": aside("x.csv", b"\n" * 2_000_000, "x.csv: "),
        "header only": aside("x.csv", HEADER, "holds a header and no rows"),
        "a byte order mark and nothing else": aside("x.csv", b"\xef\xbb\xbf", r"x\.csv"),
        "NUL bytes among the rows": aside(
            "x.csv", middle[:at] + b"2026\0\0,1,2\n" + middle[at:], "holds NUL bytes"
        ),
        "random bytes": aside("x.csv", np.random.default_rng(1).bytes(50_000), r"x\.csv"),
        "a picture": aside("x.csv", b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR" + bytes(50), "holds NUL bytes"),
        "a spreadsheet": special("x.csv", xlsx, "is a spreadsheet or zip file"),
        "gz called csv": aside("x.csv", GZ, "is a gz file without"),
        "zst called csv": aside("x.csv", ZST, r"x\.csv"),
        "Parquet called csv": taken("x.csv", PARQUET, 100),
        "csv called Parquet": aside("x.parquet", SMALL, f"the Parquet file {DAMAGED}"),
        "a web page": aside(
            "x.csv", "<!doctype html>\n<html><body>No session, log in</body></html>\n", r"x\.csv:1"
        ),
        "JSON": aside("x.csv", '[{"time": "2026-04-01T00:00Z", "FI-1.PV": 1}]\n', r"x\.csv:1"),
        "one column of one name twice": aside(
            "x.csv", SMALL.replace("FI-2", "FI-1"), "more than one column is named"
        ),
        "other separators in half of the rows": aside(
            "x.csv", HEADER + rows(20) + rows(30).replace(",", ";"), "separator cannot be told"
        ),
        "other separators in few rows": taken(
            "x.csv", HEADER + rows(40) + rows(10, 40).replace(",", ";"), 80, 20
        ),
        "ragged rows": taken(
            "x.csv", SMALL + f"{moment(60)}\n{moment(61)},1\n{moment(62)},1,2,3\n,\n", 100, 8
        ),
    }


def _long_lines() -> dict[str, Broken]:
    """Text with lines, fields and headers beyond all measure."""
    return {
        "a line of 3 million characters": aside(
            "x.csv", SMALL + "1" * 3_000_000 + "\n", "a line longer than 1024 KiB"
        ),
        "a field of 2 million characters in quotes": aside(
            "x.csv", SMALL + f'{moment(60)},"{"9" * 2_000_000}",1\n', "a line longer than 1024 KiB"
        ),
        "a field of a million characters": taken(
            "x.csv", SMALL + f"{moment(60)},{'9' * 1_000_000},1\n", 101, 1
        ),
        "a field of a million digits in the first row": taken(
            "x.csv", HEADER + f"{moment(60)},{'9' * 1_000_000},1\n" + rows(50), 101, 1
        ),
        "a field of a million digits and a letter in the first row": taken(
            "x.csv", HEADER + f"{moment(60)},{'9' * 1_000_000}x,1\n" + rows(50), 101, 1
        ),
        "a million blanks in a field of the first row": taken(
            "x.csv", HEADER + f"{moment(60)},x{' ' * 1_000_000}x,1\n" + rows(50), 101, 1
        ),
        "a million quotes in the first row": taken(
            "x.csv", HEADER + f"{moment(60)},{QUOTE * 999_999},1\n" + rows(50), 100, 2
        ),
        "a line of a million characters above the header": taken(
            "x.csv", "unit: " + "9 " * 500_000 + "\n" + SMALL, 100
        ),
        "a line of a million characters that could be a header": taken(
            "x.csv", "time," + "9 " * 500_000 + "\n" + SMALL, 100
        ),
        "a first line of 2 million characters": aside(
            "x.csv", "t" * 2_000_000 + "\n" + SMALL, "a line longer than"
        ),
        "20,000 columns": aside(
            "x.csv", "time" + ",T" * 20_000 + "\n" + moment(0) + ",1" * 20_000, "20001 columns, more than"
        ),
        "20,000 columns without names": aside(
            "x.csv", "," * 20_000 + "\n" + moment(0) + ",1" * 20_000, "20001 columns, more than"
        ),
    }


def _odd_rows() -> dict[str, Broken]:
    """Text with times, numbers, characters and quotes that are none."""
    middle = LARGE.encode()
    at = middle.index(b"\n", len(middle) * 3 // 4) + 1  # in the second block
    return {
        "infinity and numbers beyond all floats": taken(
            "x.csv",
            SMALL + f"{moment(60)},inf,-Infinity\n{moment(61)},1e400,-1e400\n{moment(62)},1e308,-1e308\n",
            102,
            4,
        ),
        "years 1900, 2100, 1 and 9999": taken(
            "x.csv",
            SMALL
            + "".join(f"{year}-01-01T00:00Z,1,2\n" for year in ("1900", "2100", "0001", "9999", "0000")),
            100,
            10,
        ),
        "all rows of the year 1900": taken("x.csv", SMALL.replace("2026-", "1900-"), 0, 100),
        "rows out of order": taken("x.csv", HEADER + rows(10, 40) + rows(40), 100),
        "rows backwards": taken("x.csv", HEADER + "".join(reversed(rows(50).splitlines(keepends=True))), 100),
        "UTF-16 of an odd count of bytes": aside(
            "x.csv", SMALL.encode("utf-16") + b"1", "does not stay the text"
        ),
        "UTF-16 with half a character": aside(
            "x.csv", b"\xff\xfe" + SMALL.encode("utf-16-le") + b"\x00\xd8\x31\x00", "does not stay the text"
        ),
        "UTF-16 that turns into bytes": taken("x.csv", SMALL.encode("utf-16") + SMALL.encode()[1:], 100, 2),
        "UTF-32": aside("x.csv", SMALL.encode("utf-32"), r"x\.csv"),
        "UTF-8 broken in the middle": aside(
            "x.csv", middle[:at] + b"\xe9,1,2\n" + middle[at:], "is not UTF-8"
        ),
        "Latin-1 with control bytes": aside(
            "x.csv", b"time,FI-1.PV,\x80\n" + rows(5).encode(), "neither UTF-8"
        ),
        "carriage returns alone": aside("x.csv", SMALL.replace("\n", "\r"), "carriage returns"),
        "carriage returns twice": aside("x.csv", SMALL.replace("\n", "\r\r\n"), "carriage return"),
        "a carriage return inside a row": taken("x.csv", SMALL + f"{moment(60)},1\r,2\n", 100, 2),
        "a quote that opens in the header": aside("x.csv", SMALL.replace("FI-1", '"FI-1'), "quote"),
        "a quote that never closes": taken("x.csv", SMALL + f'{moment(60)},"1,2\n' + rows(5, 61), 110, 2),
        "quotes in the middle of fields": taken("x.csv", SMALL + f'{moment(60)},1"2"3,2\n', 100, 2),
        "a line break inside quotes": taken("x.csv", SMALL + f'{moment(60)},"1\n2",3\n', 100, 4),
        "form feeds and bells among the rows": taken("x.csv", SMALL + f"\f{moment(60)},\x07 1,2\n", 101, 1),
    }


def _tags() -> dict[str, Broken]:
    """Tags that look like paths, formulas and worse; asked for, and not."""
    asked = {
        f"an asked tag such as {tag[:12]!r}": taken("x.csv", LONG + long_rows(tag), 3)
        for tag in ODD_TAGS
        if "\n" not in tag
    }
    header = ",".join(tag for tag in ODD_TAGS if "\n" not in tag)
    return asked | {
        "odd tags as columns": taken("x.csv", f"time,{header}\n{moment(0)},1,2,3,4\n", 4),
        "an odd tag in Parquet": taken(
            "x.parquet",
            as_parquet(pa.table({"time": table()["time"], "tag": ["two\nlines"] * 50, "value": [1.5] * 50})),
            50,
        ),
        "odd tags that nobody asks for": taken(
            "x.csv", SMALL.replace("FI-1.PV", "../../../etc/x").replace("FI-2.PV", "=1+1"), 0
        ),
        "a tag of 10,000 characters": aside(
            "x.csv", LONG + long_rows("t" * 10_000), "a name of 10000 characters"
        ),
        "a column named by 10,000 characters": aside(
            "x.csv", SMALL.replace("FI-2.PV", "t" * 10_000), "a name of 10000 characters"
        ),
        "a tag with a line break in Parquet that nobody asks for": taken(
            "x.parquet",
            as_parquet(pa.table({"time": table()["time"], "tag": ["a\n\x1b[2Jb"] * 50, "value": [1.5] * 50})),
            0,
        ),
        "a refused column whose name steers the terminal": aside(
            "x.parquet",
            as_parquet(
                pa.table(
                    {
                        "time": table()["time"],
                        "tag": [[1]] * 50,
                        "value\x1b[2J\n": [1.5] * 50,
                        "value": [1.0] * 50,
                    }
                )
            ),
            "neither",
        ),
        "150,000 tags": aside(
            "x.csv",
            LONG + "".join(f"{moment(0)},T{i},1\n" for i in range(150_000)),
            "more than 100000 different tags",
        ),
    }


def _places() -> dict[str, Broken]:
    """What is no regular file, and files that do not hold still."""
    return {
        "a folder called csv": special("x.csv", Path.mkdir, "is a folder, not an export"),
        "a link to a good file": special("x.csv", linked("../../good.csv"), "is a link, not a file"),
        "a link to nothing": special("x.csv", linked("nowhere"), "is a link, not a file"),
        "a link to itself": special("x.csv", linked("x.csv"), "is a link, not a file"),
        "a link to a folder": special("x.csv", linked(".."), "is a link, not a file"),
        "a link to a device": special("x.csv", linked("/dev/zero"), "is a link, not a file"),
        "a pipe": special("x.csv", os.mkfifo, "is a pipe, not a file"),
        "a socket": special("x.csv", listening, "is a socket, not a file"),
        "a device": Broken(
            "zero", Path.touch, "set aside", "is a device, not a file", elsewhere=Path("/dev/zero")
        ),
        "a file that grows": Broken(
            "x.csv", content(LARGE), "left for the next pass", "was changed", meanwhile=append_on
        ),
        "a file that is replaced": Broken(
            "x.csv", content(LARGE), "left for the next pass", "was changed", meanwhile=replace_it
        ),
        "a file that vanishes": Broken(
            "x.csv", content(LARGE), "left for the next pass", "was changed", meanwhile=Path.unlink
        ),
        "a file that is cut while it is read": Broken(
            "x.csv",
            content(LARGE),
            "left for the next pass",
            "was changed",
            meanwhile=lambda path: os.truncate(path, 1000),
        ),
        "a Parquet file that is cut while it is read": Broken(
            "x.parquet",
            content(PARQUET),
            "left for the next pass",
            "was changed",
            meanwhile=lambda path: os.truncate(path, 1000),
        ),
    }


def _names() -> dict[str, Broken]:
    """Files whose own names are odd; what is said of them stays two lines."""
    names = (
        "two\nlines.csv",
        "\x1b[2J.csv",
        "=cmd().csv",
        "-rf.csv",
        " .csv",
        f"{'n' * 250}.csv",
        os.fsdecode(b"M\xe4rz.csv"),
    )
    good = {f"the name {name[:12]!r}": taken(name, SMALL, 100) for name in names}
    return good | {
        f"the name {name[:12]!r} and nothing inside": aside(name, b"", "is empty") for name in names
    }


BROKEN: dict[str, Broken] = {
    **_compressed(),
    **_parquets(),
    **_odd_columns(),
    **_odd_values(),
    **_texts(),
    **_long_lines(),
    **_odd_rows(),
    **_tags(),
    **_places(),
    **_names(),
}


def unit_made() -> Unit:
    """A unit that asks for ASKED."""
    asked = (made_instrument(f"I{i}", tag=tag) for i, tag in enumerate(ASKED))
    return made_unit(*asked, exports=ExportRules("UTC", (), None))


def good_file(folder: Path) -> Path:
    """The file that every pass has to take in, whatever lies beside it."""
    lines = [f"2026-03-01T00:{i:02}Z,{i}.5,7\n" for i in range(GOOD_ROWS)]
    path = folder / "good.csv"
    path.write_text(HEADER + "".join(lines), encoding="utf-8")
    return path


def passed(case: Broken, good: Path, folder: Path, top: Path) -> dict[str, Any]:
    """Make one broken file, run a pass over it and the good one, and tell what came of it."""
    home, store = folder / "exports", Store(folder / "store")
    home.mkdir(parents=True)
    case.make(home / case.name)
    before = _outside(top, folder / "store")
    size = good.stat().st_size
    with _meanwhile(case, home / case.name, size) as progress, store.begin() as pass_:
        paths = [good, case.elsewhere or home]
        result = take_in(pass_, [unit_made()], paths, settle=timedelta(0), progress=progress)
    after = _outside(top, folder / "store")
    held = read_months(store.snapshot().paths("site", "readings"), ASKED[:2], 0, 1_774_000_000_000_000)
    return {
        "outcomes": [
            {**asdict(one), "adds_up": one.account is None or one.account.adds_up} for one in result.outcomes
        ],
        "good": {tag: series.value.tolist() for tag, series in held.items()},
        "appeared": sorted(after - before),
        "peak_mb": peak_mb(),
    }


def _outside(top: Path, store: Path) -> set[str]:
    """Every path below a folder that is not inside a store, as text."""
    found = (os.fsencode(path) for path in top.rglob("*") if not path.is_relative_to(store))
    return {path.decode("utf-8", "backslashreplace") for path in found}


@contextmanager
def _meanwhile(case: Broken, path: Path, good: int) -> Iterator[Callable[[int, int], None]]:
    """A progress callable by which a thread, once, does something to the file while it is read."""
    started = threading.Event()

    def progress(done: int, total: int) -> None:
        assert 0 <= done <= total
        if case.meanwhile is not None and done > good and not started.is_set():
            started.set()
            thread = threading.Thread(target=case.meanwhile, args=(path,))
            thread.start()
            thread.join()

    yield progress
    assert case.meanwhile is None or started.is_set()


def main() -> None:
    """Run every pass; a line of JSON each, so that a crash shows where it came."""
    top = Path(sys.argv[1])
    folder = top / "deep" / "down"  # so that ../../x would show
    folder.mkdir(parents=True)
    good = good_file(folder)
    for number, (what, case) in enumerate(BROKEN.items()):
        sys.stdout.write(json.dumps({"what": what}) + "\n")
        sys.stdout.flush()
        begin = time.perf_counter()
        try:
            told = passed(case, good, folder / f"{number}", top)
        except Exception:  # told like all else, so that one crash does not hide the next
            told = {"crash": traceback.format_exc()}
        sys.stdout.write(json.dumps({**told, "wall_s": time.perf_counter() - begin}) + "\n")


if __name__ == "__main__":
    main()
