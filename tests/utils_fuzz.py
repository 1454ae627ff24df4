"""Draws of settings from their own JSON schema, TOML text of them, and what every output must hold."""

import contextlib
import faulthandler
import json
import math
import sqlite3
import time
from contextlib import closing
from functools import lru_cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from click.testing import CliRunner
from hypothesis import strategies as st
from utils_pipeline import SHELF, settings_for

from shelfmap.cli import main
from shelfmap.pipeline import screen
from shelfmap.rasters import write_geotiff
from shelfmap.synthetic import straight_coast
from shelfmap.vectors import read_table
from shelfmap.words import STATUSES

#: No run here may take longer, seconds: a hundred times what they take.
PATIENCE_S = 60.0

NASTY = (
    "", " ", "\n", "\x1b[2J", "\x7f", "'; DROP TABLE transects; --", '"', "<b>&amp;</b>", "%s{0}", "x" * 5000,
    "../" * 40, "nan", "EPSG:4326", "EPSG:0", "EPSG:32629", "+proj=pipeline +step +proj=merc", "\u202e", "é" * 300,
)  # fmt: skip
NASTY_TEXT = st.one_of(st.text(max_size=12), st.sampled_from(NASTY))
EDGES = [0.0, -0.0, 5e-324, 1e-300, 1e-9, 1e-3, 0.5, 1.0, -1.0, 360.0, 1e9, 1e300, -1e300]
ANYTHING = st.recursive(
    st.one_of(
        st.sampled_from([math.inf, -math.inf, math.nan, 10**30, -(10**30), 2**63, True, False, *EDGES]),
        st.integers(-10, 10),
        NASTY_TEXT,
    ),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(NASTY_TEXT, inner, max_size=3)),
    max_leaves=4,
)


def numbers(node):
    """Numbers within the bounds of a schema, its ends and what is close to them the more often."""
    above = node.get("minimum", node.get("exclusiveMinimum", -1e308))
    below = node.get("maximum", node.get("exclusiveMaximum", 1e308))
    shares = (0.0, 1e-6, 0.01, 0.3, 1.0)
    ends = EDGES + [above + share * (below - above) for share in shares]

    def fits(value):
        return (above < value if "exclusiveMinimum" in node else above <= value) and (
            value < below if "exclusiveMaximum" in node else value <= below
        )

    return st.one_of(st.sampled_from([v for v in ends if fits(v)]), st.floats(above, below).filter(fits))


def from_schema(node, definitions):  # noqa: PLR0911
    """Values that a JSON schema of pydantic's allows; tables hold any few of their keys."""
    if "$ref" in node:
        node = definitions[node["$ref"].rsplit("/", 1)[1]]
    if "anyOf" in node:
        return st.one_of([from_schema(part, definitions) for part in node["anyOf"] if part.get("type") != "null"])
    if "enum" in node or "const" in node:
        return st.sampled_from(node.get("enum", [node.get("const")]))
    kind = node["type"]
    if kind == "object":
        if "properties" not in node:
            waves = st.sampled_from(["M2", "s2", "K1", "O1", "Q9"])
            return st.dictionaries(waves, from_schema(node["additionalProperties"], definitions), max_size=3)
        parts = {name: from_schema(part, definitions) for name, part in node["properties"].items()}
        names = st.lists(st.sampled_from(sorted(parts)), max_size=3, unique=True)
        return names.flatmap(lambda chosen: st.fixed_dictionaries({name: parts[name] for name in chosen}))
    if kind == "array":
        if "prefixItems" in node:
            return st.tuples(*(from_schema(part, definitions) for part in node["prefixItems"])).map(list)
        inner = from_schema(node["items"], definitions)
        inner = (
            st.sampled_from(["M2", "s2", "N2", "K1", "Mf", "M4", "Q9"]) if node["items"]["type"] == "string" else inner
        )
        return st.lists(inner, max_size=4)
    plain = {"string": NASTY_TEXT, "boolean": st.booleans(), "integer": st.integers(1, 3)}
    return plain[kind] if kind in plain else numbers(node)


@st.composite
def mutated(draw, contents):
    """The same content with up to two faults anywhere: a wrong value, a misspelt or strange key, a table too many."""
    content = json.loads(json.dumps(draw(contents)))
    for _ in range(draw(st.sampled_from([0, 0, 0, 1, 1, 2]))):
        table = draw(st.sampled_from([content, *(part for part in content.values() if isinstance(part, dict))]))
        key = draw(st.sampled_from([*table, "spacing_kn", "grid", "x y", "\n", "ключ", "", "__class__"]))
        table[key] = draw(ANYTHING)
        if draw(st.booleans()):
            table[key[1:] + key[:1]] = table.pop(key)
    return content


def toml(value):
    """A value as TOML; tables inline."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{toml(str(key))} = {toml(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007F")
    if isinstance(value, bool):
        return str(value).lower()
    return repr(value)


def toml_text(content):
    """A whole settings file."""
    return "\n".join(f"{toml(str(key))} = {toml(value)}" for key, value in content.items())


@contextlib.contextmanager
def patience(seconds=PATIENCE_S):
    """No hang: past three times the time all threads are shown and the process ends; past it the test fails."""
    started = time.monotonic()
    faulthandler.dump_traceback_later(3 * seconds, exit=True)
    try:
        yield
    finally:
        faulthandler.cancel_dump_traceback_later()
    taken = time.monotonic() - started
    assert taken < seconds, f"took {taken:.0f} s"


@lru_cache(maxsize=1)
def compile_loops():
    """Screen once, so that compiling the loops, which may take minutes on a busy machine, counts as nobody's time."""
    with TemporaryDirectory() as folder:
        tiny = straight_coast(270.0, 40.0, SHELF, cell=0.1, shape=(12, 30))
        path = write_geotiff(
            Path(folder) / "g.tif", tiny.elevation_m, x0=tiny.x0, y0=tiny.y0, dx=tiny.dx, dy=tiny.dy, crs=tiny.crs
        )
        screen(settings_for(path, folder, coast={"generalise_km": 40.0}, transects={"spacing_km": 40.0}))


def invoke(*args, codes=(0, 1, 2, 3)):
    """A command in this process, in time, with one of these exit codes and without a traceback."""
    compile_loops()
    with patience():
        result = CliRunner().invoke(main, [str(arg) for arg in args])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise AssertionError(f"{args}\n{result.output}") from result.exception
    assert result.exit_code in codes, result.output
    assert_plain(result.stderr)
    return result


def assert_plain(text):
    """Text for people: no traceback, no library's own words, no control characters that a terminal obeys."""
    for word in (
        "Traceback",
        "pydantic",
        "<class",
        "object at 0x",
        "Path(",
        "ValueError",
        "type=",
        "errno",
        "datetime.",
    ):
        assert word not in text, text
    assert not [c for c in text if c not in "\n\r" and (ord(c) < 32 or 0x7F <= ord(c) < 0xA0)], repr(text)


def assert_sound(path):
    """An output opens and has known statuses, finite numbers, gains and periods above 0, indices from 0 to 1."""
    with closing(sqlite3.connect(path)) as database:
        assert database.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        layers = [name for (name,) in database.execute("SELECT table_name FROM gpkg_contents")]
    tables = {name: read_table(path, name) for name in layers}
    assert len(tables["transects"]["status"]) > 0
    assert set(tables["transects"]["status"]) <= set(STATUSES)
    for name, table in tables.items():
        for column, values in table.items():
            if values.dtype.kind != "f":
                continue
            where, known = f"{name}.{column}", values[~np.isnan(values)]
            assert np.isfinite(known).all(), where
            if column.startswith(("gain", "damped_gain", "period1_h", "period2_h", "period3_h")):
                assert (known > 0).all(), where
            if column.startswith("index_"):
                assert ((known >= 0) & (known <= 1)).all(), where
    return tables
