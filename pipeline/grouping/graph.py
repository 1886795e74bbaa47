"""The graph of records and matches: components, spanning forest, weak links. Edges are pairs of rows."""

from __future__ import annotations

import networkx as nx
import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from ..model.batch import Floats, Ints


def components(nodes: int, edges: Ints) -> Ints:
    """(nodes,) int64: label of the component of each node, the smallest node in it. edges (e, 2)."""
    graph = coo_matrix((np.ones(len(edges), np.int8), (edges[:, 0], edges[:, 1])), shape=(nodes, nodes))
    count, label = connected_components(graph, directed=False)
    smallest = np.full(count, nodes, dtype=np.int64)
    np.minimum.at(smallest, label, np.arange(nodes))
    return np.asarray(smallest[label], dtype=np.int64)


def spanning_forest(nodes: int, edges: Ints, t: Floats) -> NDArray[np.bool_]:
    """(e,) bool: the edges of the minimum spanning forest in t; ties by the pair of nodes, so that it is unique.

    Kruskal 1956: edges in ascending order, each kept that joins two trees.
    """
    parent = list(range(nodes))

    def root(i: int) -> int:
        while parent[i] != i:
            parent[i] = parent[parent[i]]
            i = parent[i]
        return i

    kept = np.zeros(len(edges), bool)
    low, high = np.minimum(edges[:, 0], edges[:, 1]), np.maximum(edges[:, 0], edges[:, 1])
    for e in np.lexsort((high, low, t)).tolist():
        a, b = root(int(edges[e, 0])), root(int(edges[e, 1]))
        if a != b:
            parent[max(a, b)] = min(a, b)
            kept[e] = True
    return kept


def similarity_graph(members: Ints, edges: Ints, shifts: Floats, strains: Floats, t: Floats) -> nx.Graph:
    """The graph of one family: nodes `members`, the edges between them with largest_shift, strain and t as
    attributes."""
    graph: nx.Graph = nx.Graph()
    graph.add_nodes_from(int(m) for m in members)
    inside = np.isin(edges, members).all(axis=1)
    for (a, b), shift, strain, weight in zip(
        edges[inside].tolist(), shifts[inside].tolist(), strains[inside].tolist(), t[inside].tolist(), strict=True
    ):
        graph.add_edge(a, b, largest_shift=shift, strain=strain, t=weight)
    return graph


def weak_links(graph: nx.Graph) -> tuple[list[tuple[int, int]], list[int]]:
    """Bridges and articulation points: the pairs, and the records, that alone hold a family together. Ascending."""
    bridges = sorted((min(a, b), max(a, b)) for a, b in nx.bridges(graph))
    return bridges, sorted(nx.articulation_points(graph))
