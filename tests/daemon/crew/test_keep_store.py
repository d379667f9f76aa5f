"""What was committed is recalled as it was; files that are not ours are refused."""

from __future__ import annotations

import math
import os
import sqlite3
import subprocess
import sys
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.daemon.crew.keeping_changes import DURABLE, change, drop, patch, put

from byway import messages, obstacles
from byway.packed import Column, read
from bywayd.crew.keep_rows import Ground, checksum
from bywayd.crew.keep_store import (
    Hindered,
    KeepFault,
    KeepStore,
    application_id,
    recall_begin,
    schema_version,
)

NOW_S = 1_800_000_000.0


@pytest.fixture
def file(tmp_path):
    return tmp_path / "site.sqlite"


@pytest.fixture
def store(file):
    opened = KeepStore.open(file, NOW_S)
    yield opened
    opened.close()


def keep(store: KeepStore, *changes: dict[str, Any]) -> None:
    for _ in store.commit(changes):
        pass


def recalled(store: KeepStore, wall_s: float = NOW_S, count_max: int = 3) -> list[dict[str, Any]]:
    """Everything that is kept, fetched in small pieces."""
    found, place = [], recall_begin
    while place is not None:
        piece, place = store.recall(place, wall_s, count_max, 1 << 20)
        assert len(piece) <= count_max
        found += piece
    return found


def discs_of(found: list[dict[str, Any]]) -> dict[tuple[str, str], tuple[float, ...]]:
    """Layer and id of each disc, with where it is."""
    discs = {}
    for told in found:
        if told["what"] == "put":
            fields = {n: v for n, v in told["message"].items() if n != "layer"}
            message = messages.Put(layer=told["layer"], **fields)
            (obstacle_id,) = told["ids"]
            shapes = obstacles.unpack_shapes(message, told["packed"])
            discs[told["layer"], obstacle_id] = shapes.discs[obstacle_id]
    return discs


def patches_of(found: list[dict[str, Any]]) -> list[tuple[float, float]]:
    return [told["message"]["corner_m"][0] for told in found if told["what"] == "patch"]


# -- what is kept -----------------------------------------------------------------------------


def test_a_new_file_holds_nothing(store):
    assert recalled(store) == []
    assert store.patch_count == 0
    assert store.size_bytes > 0


def test_an_obstacle_is_recalled_to_the_bit_after_the_file_was_closed(file):
    corners = np.array([(0.1, 1 / 3), (500_000.7, 0.2), (500_000.7, 5_000_000.9)])
    first = KeepStore.open(file, NOW_S)
    keep(first, put(polygons={"kiln": corners}, bin=(1 / 7, 2.0, 0.3)))
    first.close()
    second = KeepStore.open(file, NOW_S)
    claim, *puts = recalled(second)
    second.close()
    assert (claim["what"], claim["layer"], claim["settings"]) == ("claim", "stacks", DURABLE)
    by_id = {told["ids"][0]: told for told in puts}
    assert by_id.keys() == {"kiln", "bin"}
    assert discs_of([by_id["bin"]]) == {("stacks", "bin"): (1 / 7, 2.0, 0.3)}
    message, packed = by_id["kiln"]["message"], by_id["kiln"]["packed"]
    vertices = read(Column(**message["columns"]["vertices_m"]), packed)
    assert np.array_equal(vertices, corners)
    # What is recalled passes the door that it came in by.
    obstacles.check(messages.Put(layer="stacks", **message), packed)


def test_a_put_moves_what_is_there_and_takes_no_room(store):
    keep(store, put(bin=(1.0, 1.0, 0.5)))
    size = store.size_bytes
    for x_m in range(200):
        keep(store, put(bin=(float(x_m), 1.0, 0.5)))
    assert discs_of(recalled(store)) == {("stacks", "bin"): (199.0, 1.0, 0.5)}
    assert store.size_bytes == size


def test_a_replacement_forgets_the_layer_and_no_other(store):
    keep(store, put(a=(1, 1, 1), b=(2, 2, 1)), patch(0, 0, 2, 2), put("racks", a=(3, 3, 1)))
    keep(store, put(what="replace", c=(4, 4, 1)))
    found = recalled(store)
    assert discs_of(found) == {("stacks", "c"): (4, 4, 1), ("racks", "a"): (3, 3, 1)}
    assert patches_of(found) == []
    assert store.patch_count == 0


def test_what_is_dropped_is_gone_and_what_never_was_is_no_error(store):
    keep(store, put(a=(1, 1, 1), b=(2, 2, 1)))
    keep(store, drop("a", "never"), drop("a", layer="elsewhere"))
    assert discs_of(recalled(store)) == {("stacks", "b"): (2, 2, 1)}


def test_a_layer_that_is_durable_no_more_is_forgotten(store):
    live = {**DURABLE, "durable": False}
    keep(store, put(a=(1, 1, 1)), patch(0, 0, 2, 2), put("racks", a=(3, 3, 1)))
    keep(store, change("claim", settings=live))
    assert [told["layer"] for told in recalled(store)] == ["racks", "racks"]


def test_settings_of_a_layer_are_those_told_last(store):
    later = {**DURABLE, "when_stale": "refuse", "expected_period_s": 2.5}
    keep(store, change("claim"), change("claim", settings=later))
    (claim,) = recalled(store)
    assert claim["settings"] == later


LAYERS, IDS = ("stacks", "racks"), ("a", "b", "c")
one_change = st.one_of(
    st.builds(
        lambda what, layer, ids, at: put(layer, what=what, **dict.fromkeys(ids, (at, 0.0, 1.0))),
        st.sampled_from(("put", "replace")),
        st.sampled_from(LAYERS),
        st.sets(st.sampled_from(IDS)),
        st.integers(0, 99).map(float),
    ),
    st.builds(
        lambda ids, layer: drop(*ids, layer=layer),
        st.sets(st.sampled_from(IDS)),
        st.sampled_from(LAYERS),
    ),
)


@settings(max_examples=40, deadline=None)
@given(batches=st.lists(st.lists(one_change, min_size=1, max_size=4), max_size=6))
def test_any_changes_leave_what_a_dictionary_would_hold(tmp_path_factory, batches):
    store = KeepStore.open(tmp_path_factory.mktemp("keep") / "site.sqlite", NOW_S)
    model: dict[tuple[str, str], float] = {}
    for batch in batches:
        keep(store, *batch)
        keep(store, *batch)  # a batch whose answer was lost comes again
        for told in batch:
            layer = told["layer"]
            if told["what"] == "replace":
                model = {key: x_m for key, x_m in model.items() if key[0] != layer}
            if told["what"] == "drop":
                for obstacle_id in told["ids"]:
                    model.pop((layer, obstacle_id), None)
            else:
                found = messages.Put(layer=layer, **_as_put(told["message"]))
                for obstacle_id, disc in obstacles.unpack_shapes(
                    found, told["packed"]
                ).discs.items():
                    model[layer, obstacle_id] = disc[0]
    found = {key: disc[0] for key, disc in discs_of(recalled(store)).items()}
    store.close()
    assert found == model


def _as_put(message: dict[str, Any]) -> dict[str, Any]:
    return {n: v for n, v in message.items() if n in messages.Put.model_fields and n != "layer"}


# -- patches ----------------------------------------------------------------------------------


def test_a_patch_that_is_covered_goes_and_the_others_stay_in_order(store):
    keep(store, patch(0, 0, 4, 4), patch(1, 1, 2, 2), patch(9, 9, 1, 1), patch(1.5, 0, 4, 4))
    assert patches_of(recalled(store)) == [0, 1, 9, 1.5]
    keep(store, patch(0, 0, 4, 6))  # to x 3 m, y 2 m
    assert patches_of(recalled(store)) == [9, 1.5, 0]
    assert store.patch_count == 3


def test_patches_that_come_again_and_again_take_no_room(store):
    for value in range(50):
        keep(store, patch(0.1, 0.7, 8, 8, heading_rad=0.3, value=value % 3))
    (_, last) = recalled(store)
    assert read(Column(**last["message"]["columns"]["cells"]), last["packed"])[0, 0] == 49 % 3
    assert store.patch_count == 1


def test_patches_cover_within_their_layer_only(store):
    keep(store, patch(0, 0, 2, 2), patch(0, 0, 2, 2, layer="racks"))
    assert len(patches_of(recalled(store))) == 2


@settings(max_examples=60, deadline=None)
@given(
    outer=st.tuples(st.floats(-50, 50), st.floats(-50, 50), st.floats(-3.2, 3.2)),
    inner=st.tuples(st.floats(-3, 3), st.floats(-3, 3), st.floats(-3.2, 3.2)),
    shape=st.tuples(st.integers(1, 8), st.integers(1, 8)),
)
def test_covered_is_what_shapely_calls_covered(outer, inner, shape):
    shapely = pytest.importorskip("shapely")
    x_m, y_m, heading_rad = outer
    big = patch(x_m, y_m, 12, 10, heading_rad=heading_rad)["message"]
    small = patch(x_m + inner[0], y_m + inner[1], *shape, heading_rad=inner[2])["message"]
    boxes = [
        shapely.affinity.translate(
            shapely.affinity.rotate(
                shapely.box(0, 0, columns * 0.5, rows * 0.5), angle, (0, 0), use_radians=True
            ),
            *corner,
        )
        for (rows, columns), angle, corner in (
            ((12, 10), heading_rad, (x_m, y_m)),
            (shape, inner[2], (x_m + inner[0], y_m + inner[1])),
        )
    ]
    overhang_m2 = boxes[1].difference(boxes[0]).area
    if overhang_m2 > 1e-6:
        assert not Ground(big).covers(Ground(small))
    elif boxes[0].buffer(-1e-6).contains(boxes[1]):
        assert Ground(big).covers(Ground(small))
    assert Ground(big).box_m == pytest.approx(boxes[0].bounds)


# -- time -------------------------------------------------------------------------------------


def test_what_expires_is_recalled_with_the_time_it_has_left_and_not_after_it(file):
    store = KeepStore.open(file, NOW_S)
    keep(store, put(expires_s=NOW_S + 10, a=(1, 1, 1)), put(expires_s=NOW_S + 99, b=(1, 1, 1)))
    keep(store, put(expires_s=NOW_S + 10, c=(1, 1, 1)), put(c=(1, 1, 1)))
    store.close()
    store = KeepStore.open(file, NOW_S + 20)
    left = {told["ids"][0]: told["expires_in_s"] for told in recalled(store, NOW_S + 20)[1:]}
    store.close()
    assert left == {"b": pytest.approx(79.0), "c": None}


# -- all or nothing ---------------------------------------------------------------------------


def test_a_full_disk_keeps_nothing_of_the_batch_and_all_that_was_before(file):
    store = KeepStore.open(file, NOW_S)
    keep(store, put(a=(1, 1, 1)))
    store._connection.execute(f"PRAGMA max_page_count = {store.size_bytes // 4096 + 1}")
    many = put(**{f"o{i}": (1.0, 1.0, 1.0) for i in range(400)})
    for _ in range(2):
        with pytest.raises(Hindered, match="no room"):
            keep(store, put(b=(2, 2, 1)), many)
    assert discs_of(recalled(store)) == {("stacks", "a"): (1, 1, 1)}
    store._connection.execute("PRAGMA max_page_count = 100000")
    keep(store, put(b=(2, 2, 1)), many)
    assert len(discs_of(recalled(store))) == 402
    store.close()


def test_a_change_that_cannot_be_read_leaves_no_trace_of_its_batch(store):
    broken = put(b=(2, 2, 1))
    broken["packed"] = broken["packed"][:-8]
    with pytest.raises(Exception, match=r"."):
        keep(store, put(a=(1, 1, 1)), broken)
    assert recalled(store) == []
    keep(store, put(a=(1, 1, 1)))
    assert len(recalled(store)) == 2


KILLED = """
import os, signal, sys
from pathlib import Path
from bywayd.crew.keep_store import KeepStore
from tests.daemon.crew.keeping_changes import put
store = KeepStore.open(Path(sys.argv[1]), 1.8e9)
for x_m in range(10**6):
    for place in store.commit([put(**{f"o{i}": (float(x_m), 0.0, 1.0) for i in range(3)})]):
        pass
    print(x_m, flush=True)
"""


def test_what_was_committed_survives_a_kill_in_the_middle_and_a_batch_is_whole(file):
    for kill in range(3):
        process = subprocess.Popen(
            [sys.executable, "-c", KILLED, str(file)],
            stdout=subprocess.PIPE,
            text=True,
            env={**os.environ, "PYTHONPATH": os.getcwd()},
        )
        assert process.stdout is not None
        with process.stdout:
            told = [process.stdout.readline() for _ in range(5 + 7 * kill)]
            process.kill()
            told += process.stdout.read().splitlines()
        process.wait()
        committed = int([line for line in told if line.strip()][-1])
        store = KeepStore.open(file, NOW_S)
        places = {disc[0] for disc in discs_of(recalled(store)).values()}
        store.close()
        assert len(places) == 1
        assert places.pop() in (committed, committed + 1)


# -- files that cannot be used ------------------------------------------------------------------


def test_a_file_that_is_no_database_is_left_alone(file):
    file.write_text("[site]\ncell_m = 0.1\n" * 100)
    before = file.read_bytes()
    with pytest.raises(KeepFault, match="is not a database"):
        KeepStore.open(file, NOW_S)
    assert file.read_bytes() == before


def test_a_database_of_something_else_is_left_alone(file):
    with sqlite3.connect(file) as other:
        other.execute("CREATE TABLE layers (layer TEXT)")
    other.close()
    before = file.read_bytes()
    with pytest.raises(KeepFault, match="of something else"):
        KeepStore.open(file, NOW_S)
    assert file.read_bytes() == before


def test_a_file_of_a_later_version_is_left_alone(file):
    KeepStore.open(file, NOW_S).close()
    with sqlite3.connect(file) as later:
        later.execute(f"PRAGMA user_version = {schema_version + 1}")
    later.close()
    with pytest.raises(KeepFault, match=f"version {schema_version + 1}"):
        KeepStore.open(file, NOW_S)


def test_two_daemons_cannot_use_one_file(store, file):
    with pytest.raises(KeepFault, match="in use"):
        KeepStore.open(file, NOW_S, wait_s=0.01)
    keep(store, put(a=(1, 1, 1)))  # the first is none the worse for it


def test_an_empty_file_is_taken_for_a_new_one(file):
    file.touch()
    store = KeepStore.open(file, NOW_S)
    keep(store, put(a=(1, 1, 1)))
    assert store._number("PRAGMA application_id") == application_id
    store.close()


def test_a_folder_that_is_not_there_or_not_ours_is_told_as_such(tmp_path):
    with pytest.raises(KeepFault, match="cannot be written"):
        KeepStore.open(tmp_path / "nowhere" / "site.sqlite", NOW_S)
    with pytest.raises(KeepFault, match=r"cannot be (written|used)"):
        KeepStore.open(tmp_path, NOW_S)


@pytest.mark.skipif(os.geteuid() != 0, reason="another user is needed to be locked out")
def test_a_file_that_others_own_is_told_as_such(file):
    KeepStore.open(file, NOW_S).close()
    file.parent.chmod(0o755)
    os.seteuid(65534)
    try:
        with pytest.raises(KeepFault, match=r"cannot be written|cannot be used"):
            KeepStore.open(file, NOW_S)
    finally:
        os.seteuid(0)


def _altered(file, table, column, value):
    with sqlite3.connect(file) as other:
        other.execute(f"UPDATE {table} SET {column} = ?", (value,))
    other.close()


@pytest.mark.parametrize(
    ("table", "column", "value"),
    [
        ("layers", "body", b"\x80"),
        ("obstacles", "packed", b"\0" * 8),
        ("obstacles", "expires_s", NOW_S + 1),
        ("obstacles", "layer", "elsewhere"),
        ("patches", "body", b"\x80"),
    ],
)
def test_a_row_that_is_not_what_was_written_is_never_recalled(file, table, column, value):
    store = KeepStore.open(file, NOW_S)
    keep(store, put(a=(1, 1, 1)), patch(0, 0, 2, 2))
    store.close()
    _altered(file, table, column, value)
    store = KeepStore.open(file, NOW_S)
    with pytest.raises(KeepFault, match="damaged"):
        recalled(store)
    store.close()


def test_a_file_with_broken_pages_is_refused_and_left_alone(file):
    store = KeepStore.open(file, NOW_S)
    keep(store, put(**{f"o{i}": (1.0, 1.0, 1.0) for i in range(200)}))
    store.close()
    whole = bytearray(file.read_bytes())
    for page in range(2, len(whole) // 4096):
        whole[page * 4096 : page * 4096 + 64] = os.urandom(64)
    file.write_bytes(whole)
    with pytest.raises(KeepFault, match=r"damaged|cannot be used"):
        KeepStore.open(file, NOW_S)
    assert file.read_bytes() == whole


def test_a_checksum_tells_where_one_part_ends_and_the_next_begins():
    assert checksum("ab", b"c") != checksum("a", b"bc")
    assert math.log2(checksum("a", b"b") + 1) <= 32


def test_tidying_up_leaves_everything_where_it_was(store, file):
    keep(store, put(a=(1, 1, 1)))
    assert store.tidy()
    assert not store.tidy()
    assert discs_of(recalled(store)) == {("stacks", "a"): (1, 1, 1)}
    keep(store, drop("a"))
    assert store.tidy()


def test_holes_and_boxes_come_back_as_they_were(store):
    ring = [(0.0, 0.0), (9.0, 0.0), (9.0, 9.0), (0.0, 9.0)]
    hole = [(1 / 3, 1.0), (2.0, 1.0), (2.0, 2.0)]
    found = obstacles.shapes(
        {"hall": {"outline": ring, "holes": [hole]}, "kiln": ring},
        {},
        {"crate": (1.0, 2.0, 0.3, 4.0, 5.0)},
    )
    fields, packed = obstacles.pack_shapes(found)
    message = messages.Put(layer="stacks", **fields).model_dump()
    keep(store, change("put", message=message, packed=packed))
    back = {}
    for told in recalled(store)[1:]:
        one = messages.Put(layer="stacks", **told["message"])
        obstacles.check(one, told["packed"])
        back[told["ids"][0]] = obstacles.unpack_shapes(one, told["packed"])
    assert back.keys() == {"hall", "kiln", "crate"}
    assert np.array_equal(back["hall"].holes["hall"][0], hole)
    assert np.array_equal(back["hall"].polygons["hall"], ring)
    assert back["kiln"].holes == {}
    assert back["crate"].boxes == {"crate": (1.0, 2.0, 0.3, 4.0, 5.0)}
