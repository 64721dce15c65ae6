"""Rounds made up in families that published instances come in (their kinds, not their data), and their optimum by
integer programming: degrees alone at first, a cut for every set of nodes that the solution leaves out."""

import networkx as nx
import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_matrix, vstack


def made(kind, size, seed):
    """(N, N) whole-numbered legs, 0 on the diagonal."""
    random = np.random.default_rng([seed, size, KINDS.index(kind)])
    legs = np.round(FAMILIES[kind](size, random, seed)).astype(float)
    np.fill_diagonal(legs, 0.0)
    return legs


def _apart(points):
    return np.hypot(*(points[:, None] - points[None]).transpose(2, 0, 1))


def _geographical(size, random, seed):
    """Great circles between places given in degrees."""
    latitude, longitude = np.radians(random.uniform(-40, 60, size)), np.radians(random.uniform(-20, 60, size))
    cosine = (np.sin(latitude[:, None]) * np.sin(latitude)
              + np.cos(latitude[:, None]) * np.cos(latitude) * np.cos(longitude[:, None] - longitude))
    return np.floor(6378.388 * np.arccos(np.clip(cosine, -1, 1)) + 1)


def _roads(size, random, seed):
    """Ways over a net of roads longer than the straight line, the shortest of them."""
    legs = _apart(random.uniform(0, 200, (size, 2))) * random.uniform(1, 1.5, (size, size))
    return _shortest(np.triu(legs, 1) + np.triu(legs, 1).T)


def _streets(size, random, seed):
    """One-way streets, a few from each corner."""
    legs = np.where(random.random((size, size)) < 0.9, 1e4, random.integers(5, 150, (size, size))).astype(float)
    ring = random.permutation(size)
    legs[ring, np.roll(ring, -1)] = random.integers(5, 150, size)
    return _shortest(legs)


def _shortest(legs):
    for k in range(len(legs)):
        legs = np.minimum(legs, legs[:, k, None] + legs[None, k])
    return legs


def _few_values(size, random, seed):
    """Three to nine values in all, the same both ways."""
    legs = np.triu(10 * random.integers(1, (3, 5, 9)[seed % 3] + 1, (size, size)), 1)
    return legs + legs.T


def _heaps(size, random, seed):
    """Nothing within a heap, a few values between them."""
    heap = random.integers(0, max(3, size // 4), size)
    between = random.integers(1, (10, 50)[seed % 2], (heap.max() + 1, heap.max() + 1))
    return np.where(heap[:, None] == heap, 0, between[heap][:, heap])


def _one_way_groups(size, random, seed):
    """Next to nothing within groups and on to later ones, thousands back to an earlier one."""
    group = np.sort(random.integers(0, (3, 5, 8)[seed % 3], size))
    legs = random.integers(0, 40, (size, size)) + 5000 * (group[:, None] > group)
    return legs + 5000 * (seed % 2) * (random.random((size, size)) < 0.1)


def _change_overs(size, random, seed):
    """Families of jobs with long times to change over, some with a great constant in each leg."""
    family, change = random.integers(0, 6, size), 3 * random.integers(0, 400, (6, 6))
    return change[family][:, family] + random.integers(0, 60, (size, size)) + (0, 10_000)[seed % 2]


def _flow_shop(size, random, seed):
    """Jobs that may not wait between five machines: how much later the next can begin; node 0 is the end."""
    ends = np.cumsum(random.integers(1, 100, (size, 5)), axis=1)
    ends[0] = 0
    begins = np.concatenate([np.zeros((size, 1)), ends[:, :-1]], axis=1)
    legs = (ends[:, None] - begins[None]).max(axis=2)
    legs[0], legs[:, 0] = 0, ends[:, -1]
    return legs


def _crane(size, random, seed):
    """Empty runs of a crane from where one load is set down to where the next is taken up."""
    here, there = random.integers(0, 300, (2, size, 2))
    return np.abs(here[:, None] - there[None]).max(axis=-1)


def _tilted(size, random, seed):
    """A drill over a tilted board: up costs more than down."""
    at = random.integers(0, 1000, (size, 2))
    right, up = (at[:, None] - at[None]).T
    return np.maximum(np.where(right > 0, 2 * right, -right), np.where(up > 0, 3 * up, -up))


FAMILIES = {
    "plane": lambda size, random, seed: _apart(random.integers(0, (70, 1700)[seed % 2], (size, 2))),
    "globe": _geographical,
    "roads": _roads,
    "few values": _few_values,
    "blocks": lambda size, random, seed: 10 * np.abs(
        np.subtract.outer(np.arange(size) % 8, np.arange(size) % 8)) + 10 * np.abs(
        np.subtract.outer(np.arange(size) // 8, np.arange(size) // 8)),
    "ties": lambda size, random, seed: 1000 + random.integers(0, 2, (size, size)),
    "any": lambda size, random, seed: random.integers(1, 1000, (size, size)),
    "skewed": lambda size, random, seed: (
        _apart(random.integers(0, 1500, (size, 2))) + random.integers(0, 100, (size, size))),
    "streets": _streets,
    "heaps": _heaps,
    "one-way groups": _one_way_groups,
    "change-overs": _change_overs,
    "flow shop": _flow_shop,
    "crane": _crane,
    "tilted": _tilted,
}  # fmt: skip
KINDS = tuple(FAMILIES)


def least_round(legs, limit_s=40.0):
    """The least round's length, None where it was not found in time. Subtour cuts after Dantzig, Fulkerson & Johnson
    (1954), by minimum cuts of the relaxation and by circles of whole-numbered solutions; HiGHS through SciPy."""
    size = len(legs)
    tail, head = np.nonzero(~np.eye(size, dtype=bool))
    edges = len(tail)
    ends = np.concatenate([tail, head + size])
    rows = [csr_matrix((np.ones(2 * edges), (ends, np.tile(np.arange(edges), 2))), shape=(2 * size, edges))]
    low, high, whole = [1.0] * 2 * size, [1.0] * 2 * size, False
    while True:
        solved = milp(legs[tail, head], constraints=LinearConstraint(vstack(rows), low, high), bounds=Bounds(0, 1),
                      integrality=np.full(edges, int(whole)), options={"mip_rel_gap": 0, "time_limit": limit_s})
        if solved.status != 0:
            return None
        sets = _left_out(size, tail, head, solved.x)
        for members in sets:
            inside = np.isin(np.arange(size), list(members))
            rows.append(csr_matrix((inside[tail] & ~inside[head]).astype(float)))
            low, high = [*low, 1.0], [*high, np.inf]
        if whole and not sets:
            return round(float(solved.fun))
        whole = whole or not sets


def _left_out(size, tail, head, share):
    """Sets of nodes that are left less than once."""
    graph = nx.DiGraph()
    graph.add_nodes_from(range(size))
    for edge in np.flatnonzero(share > 1e-7):
        graph.add_edge(int(tail[edge]), int(head[edge]), capacity=float(share[edge]))
    parts = list(nx.weakly_connected_components(graph))
    if len(parts) > 1:
        return parts
    found = set()
    for node in range(1, size):
        for pair in ((0, node), (node, 0)):
            value, (near, _) = nx.minimum_cut(graph, *pair)
            if value < 1 - 1e-6:
                found.add(frozenset(near))
        if len(found) >= 20:
            break
    return list(found)
