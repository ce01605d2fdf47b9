"""Values that others have printed."""

from __future__ import annotations

import networkx as nx
import pytest

from isthmus.betweenness import betweenness


def of(network, build, engine):
    names = list(network)
    number = {name: i for i, name in enumerate(names)}
    arcs = [(number[a], number[b]) for a, b in network.edges()]
    estimate = betweenness(build(len(names), arcs, False), method="exact", engine=engine)
    return dict(zip(names, estimate.betweenness, strict=True)), dict(zip(names, estimate.pairs, strict=True))


def test_karate_club(build, engine):
    """Zachary 1977, J. Anthropological Research 33, ties unweighted; 0 is the instructor, 33 the president."""
    _, pairs = of(nx.karate_club_graph(), build, engine)
    assert [pairs[0], pairs[33], pairs[32]] == pytest.approx([231.071429, 160.551587, 76.690476], abs=5e-7)
    assert sorted(pairs, key=pairs.get)[-3:] == [32, 33, 0]


def test_florentine_families(build, engine):
    """Marriages of Padgett and Ansell 1993 (Am. J. Sociology 98) without the isolate Pucci.

    Printed in Jackson 2008, Social and Economic Networks, section 1.2.
    """
    share, _ = of(nx.florentine_families_graph(), build, engine)
    printed = {"Medici": 0.522, "Guadagni": 0.255, "Strozzi": 0.103}
    assert {name: round(share[name], 3) for name in printed} == printed
