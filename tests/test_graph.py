"""Ties -> compressed adjacency -> disk and back; and what is told of each party."""

from __future__ import annotations

from collections import deque
from datetime import UTC, datetime, timedelta
from fractions import Fraction
from pathlib import Path

import numpy as np
import polars as pl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from isthmus.errors import DataRefused, StoreError
from isthmus.graph import Graph, describe

START = datetime(2026, 3, 1, tzinfo=UTC)


def frame(pairs, **more) -> pl.DataFrame:
    columns = {"sender": [a for a, _ in pairs], "receiver": [b for _, b in pairs], **more}
    return pl.DataFrame(columns, schema_overrides={"sender": pl.String, "receiver": pl.String})


def rows_of(graph: Graph, side: str = "out") -> list[list[int]]:
    ptr, adj = getattr(graph, f"{side}_ptr"), getattr(graph, f"{side}_adj")
    return [adj[ptr[v] : ptr[v + 1]].tolist() for v in range(graph.n)]


def lengths_of(graph: Graph, side: str = "") -> dict[tuple[int, int], int]:
    ptr, adj = (graph.in_ptr, graph.in_adj) if side else (graph.out_ptr, graph.out_adj)
    values = graph.in_lengths if side else graph.out_lengths
    return {(v, int(adj[at])): int(values[at]) for v in range(graph.n) for at in range(ptr[v], ptr[v + 1])}


PAIRS = [("b", "a"), ("a", "c"), ("b", "a"), ("c", "c"), ("a", "b"), ("d", "d")]


def test_directed_rows_and_their_reverse() -> None:
    graph = Graph.from_ties(frame(PAIRS), directed=True)
    assert graph.parties.to_list() == ["a", "b", "c", "d"]
    assert rows_of(graph) == [[1, 2], [0], [], []]
    assert rows_of(graph, "in") == [[1], [0], [0], []]
    assert (graph.n, graph.arcs, graph.ties, graph.out_lengths) == (4, 3, 3, None)


def test_undirected_ties_stand_in_both_rows() -> None:
    graph = Graph.from_ties(frame(PAIRS), directed=False)
    assert rows_of(graph) == [[1, 2], [0], [0], []] == rows_of(graph, "in")
    assert (graph.n, graph.arcs, graph.ties) == (4, 4, 2)


@pytest.mark.parametrize("directed", [True, False])
def test_enum_categorical_whole_number_and_text_keys_give_the_same(directed: bool) -> None:
    text = frame([(a.encode().hex(), b.encode().hex()) for a, b in PAIRS])
    book = pl.Enum(["unused", *sorted({*text["sender"], *text["receiver"]}, reverse=True)])
    plain = Graph.from_ties(text, directed=directed)
    for type_ in (book, pl.Categorical, pl.Int64):
        graph = Graph.from_ties(text.cast({"sender": type_, "receiver": type_}), directed=directed)
        assert graph.parties.to_list() == plain.parties.to_list()
        assert rows_of(graph) == rows_of(plain)


def test_parties_are_sorted_by_their_bytes() -> None:
    keys = ["Z", "a", "é", "😀", "10", "9", "a b", "\x00"]
    graph = Graph.from_ties(frame([(key, "hub") for key in keys]))
    assert graph.parties.to_list() == sorted([*keys, "hub"], key=str.encode)


def test_equal_routes_have_equal_lengths() -> None:
    """Twice as strong is half as long, to the last bit: 1/2 + 1/2 = 1/3 + 1/3 + 1/3 = 1."""
    strengths = [1, 2, 2, 3, 3, 3, 7, 16, 10]
    ties = frame([(str(at), str(at + 1)) for at in range(9)], contacts=strengths)
    graph = Graph.from_ties(ties, distance="contacts")
    length = [lengths_of(graph)[at, at + 1] for at in range(9)]
    assert length[1] + length[2] == length[0] == sum(length[3:6])
    assert [Fraction(value, length[0]) for value in length] == [Fraction(1, strength) for strength in strengths]


def test_strengths_of_repeated_ties_and_both_directions_add_up() -> None:
    ties = frame([("a", "b"), ("a", "b"), ("b", "a"), ("b", "c")], contacts=[1, 2, 3, 1])
    one = Graph.from_ties(ties, distance="contacts").out_lengths
    assert one is not None
    graph = Graph.from_ties(ties, directed=True, distance="contacts")
    unit = lengths_of(graph)[1, 2]
    assert lengths_of(graph) == {(0, 1): unit // 3, (1, 0): unit // 3, (1, 2): unit}
    assert lengths_of(graph, "in") == {(1, 0): unit // 3, (0, 1): unit // 3, (2, 1): unit}
    both = Graph.from_ties(ties, directed=False, distance="contacts")
    assert lengths_of(both) == {(0, 1): unit // 6, (1, 0): unit // 6, (1, 2): unit, (2, 1): unit}


def test_a_tie_without_strength_is_left_out_and_its_parties_stay() -> None:
    ties = frame([("a", "b"), ("c", "d"), ("e", "f")], amount=[0.0, 2.5, None])
    graph = Graph.from_ties(ties, distance="amount")
    assert graph.parties.to_list() == list("abcdef")
    assert list(lengths_of(graph)) == [(2, 3)]


def test_very_strong_ties_keep_a_positive_length() -> None:
    ties = frame([("a", "b"), ("b", "c")], amount=[1e-9, 1e18])
    assert min(Graph.from_ties(ties, distance="amount").out_lengths) == 1


def test_what_is_refused() -> None:
    with pytest.raises(DataRefused, match="ties lack the column receiver"):
        Graph.from_ties(pl.DataFrame({"sender": ["a"]}))
    with pytest.raises(DataRefused, match="ties lack the column amount"):
        Graph.from_ties(frame([("a", "b")]), distance="amount")
    with pytest.raises(DataRefused, match="null sender or receiver"):
        Graph.from_ties(frame([("a", None)]))


GRAPHS = {
    "plain": (PAIRS, {}),
    "no arcs": ([("a", "a")], {}),
    "nobody": ([], {}),
    "weighted": (PAIRS, {"distance": "contacts"}),
}


@pytest.mark.parametrize("directed", [True, False])
@pytest.mark.parametrize("name", GRAPHS)
def test_saved_and_mapped(tmp_path: Path, name: str, directed: bool) -> None:
    pairs, how = GRAPHS[name]
    saved = Graph.from_ties(frame(pairs, contacts=[1] * len(pairs)), directed=directed, **how)
    saved.save(tmp_path)
    opened = Graph.open(tmp_path)
    assert opened.parties.equals(saved.parties)
    assert (opened.directed, opened.n, opened.arcs) == (directed, saved.n, saved.arcs)
    for array in ("out_ptr", "out_adj", "in_ptr", "in_adj", "out_lengths", "in_lengths"):
        before, after = getattr(saved, array), getattr(opened, array)
        assert (before is None) == (after is None), array
        if before is not None:
            assert isinstance(after, np.memmap)
            assert not after.flags.writeable
            assert after.dtype == before.dtype
            assert np.array_equal(before, after), array


def test_a_saved_graph_replaces_the_one_before(tmp_path: Path) -> None:
    """Lengths and reverse arrays of an earlier graph must not come back with a later one."""
    Graph.from_ties(frame(PAIRS, contacts=[1] * 6), directed=True, distance="contacts").save(tmp_path)
    plain = Graph.from_ties(frame([("x", "y"), ("x", "z")]), directed=False)
    plain.save(tmp_path)
    opened = Graph.open(tmp_path)
    assert opened.out_lengths is None
    assert rows_of(opened, "in") == rows_of(plain, "in")


def test_a_missing_snapshot_is_told(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match="run the night again"):
        Graph.open(tmp_path / "nowhere")


# ---------------------------------------------------------------- what is told of each party


def component_sets(parties: list[str], pairs: set[tuple[str, str]]) -> list[list[str]]:
    """Largest first; equal sizes by their first party. A search from each party not yet reached."""
    near: dict[str, set[str]] = {party: set() for party in parties}
    for a, b in pairs:
        near[a].add(b)
        near[b].add(a)
    reached, found = set(), []
    for party in parties:
        if party in reached:
            continue
        queue, members = deque([party]), {party}
        while queue:
            for other in near[queue.popleft()] - members:
                members.add(other)
                queue.append(other)
        reached |= members
        found.append(sorted(members))
    return sorted(found, key=lambda members: (-len(members), members[0]))


names = st.sampled_from([f"p{number}" for number in range(9)])
tie = st.tuples(names, names, st.integers(1, 5), st.integers(0, 1000), st.integers(0, 50), st.integers(0, 50))


@settings(deadline=None)
@given(
    st.lists(tie.filter(lambda t: t[0] != t[1]), min_size=1, max_size=14, unique_by=lambda t: t[:2]),
    st.booleans(),
    st.booleans(),
)
def test_describe_agrees_with_counting_by_hand(ties, directed: bool, amounts: bool) -> None:
    moments = [(START + timedelta(hours=min(a, b)), START + timedelta(hours=max(a, b))) for *_, a, b in ties]
    table = frame(
        [t[:2] for t in ties],
        contacts=[t[2] for t in ties],
        amount=pl.Series([t[3] / 10 if amounts else None for t in ties], dtype=pl.Float64),
        first_seen=[first for first, _ in moments],
        last_seen=[last for _, last in moments],
    )
    book = pl.Enum(["0 unused", *(f"p{number}" for number in range(9))])
    graph = Graph.from_ties(table, directed=directed)
    described = describe(graph, table.cast({"sender": book, "receiver": book}))
    assert described["party"].to_list() == graph.parties.to_list()
    components = component_sets(graph.parties.to_list(), {t[:2] for t in ties})
    for row in described.iter_rows(named=True):
        me = row["party"]
        out, into = [t for t in ties if t[0] == me], [t for t in ties if t[1] == me]
        mine = [span for t, span in zip(ties, moments, strict=True) if me in t[:2]]
        number = next(at for at, members in enumerate(components) if me in members)
        assert row == {
            "party": me,
            "degree": len({t[1] for t in out} | {t[0] for t in into}),
            "degree_in": len(into),
            "degree_out": len(out),
            "contacts_in": sum(t[2] for t in into),
            "contacts_out": sum(t[2] for t in out),
            "amount_in": sum(t[3] for t in into) / 10 if amounts else None,
            "amount_out": sum(t[3] for t in out) / 10 if amounts else None,
            "component": number,
            "component_size": len(components[number]),
            "first_seen": min(first for first, _ in mine),
            "last_seen": max(last for _, last in mine),
        }


def test_components_are_numbered_by_size_then_first_party() -> None:
    pairs = [("z", "y"), ("y", "x"), ("b", "a"), ("d", "c")]
    table = frame(
        pairs,
        contacts=[1] * 4,
        amount=pl.Series([None] * 4, dtype=pl.Float64),
        first_seen=[START] * 4,
        last_seen=[START] * 4,
    )
    described = describe(Graph.from_ties(table), table)
    told = dict(described.select("party", "component").iter_rows())
    assert told == {"x": 0, "y": 0, "z": 0, "a": 1, "b": 1, "c": 2, "d": 2}
