"""Readers of published ordering instances: TSPLIB 95 (Reinelt, ORSA J. Computing 3(4), 1991), and the text format of
López-Ibáñez and Blum's collection of instances with windows (times, then one window a node; node 0 the depot)."""

import csv

import numpy as np


def read_tsplib(path):
    """(N, N) whole-numbered distances as section 2 of the TSPLIB 95 report defines them."""
    header, sections, section = {}, {}, None
    for line in path.read_text().splitlines():
        name, colon, value = line.partition(":")
        if colon:
            header[name.strip()] = value.strip()
        elif line.strip().endswith("SECTION"):
            section = sections.setdefault(line.strip(), [])
        elif section is not None and line.strip() != "EOF":
            section += [float(word) for word in line.split()]
    kind = header.get("EDGE_WEIGHT_TYPE", "")
    if kind == "EXPLICIT":
        return _explicit(np.array(sections["EDGE_WEIGHT_SECTION"]), header["EDGE_WEIGHT_FORMAT"],
                         int(header["DIMENSION"]))
    at = np.array(sections["NODE_COORD_SECTION"]).reshape(-1, 3)[:, 1:]
    apart = np.hypot(*(at[:, None] - at[None]).transpose(2, 0, 1))
    distances = {"EUC_2D": lambda: np.floor(apart + 0.5), "ATT": lambda: np.ceil(apart / np.sqrt(10.0) - 1e-9),
                 "GEO": lambda: _geographical(at)}[kind]()
    np.fill_diagonal(distances, 0.0)
    return distances


def _explicit(numbers, layout, size):
    if layout == "FULL_MATRIX":
        full = numbers.reshape(size, size)
    else:
        full = np.zeros((size, size))
        rows = {"UPPER_ROW": np.triu_indices(size, 1), "UPPER_DIAG_ROW": np.triu_indices(size),
                "LOWER_DIAG_ROW": np.tril_indices(size), "LOWER_ROW": np.tril_indices(size, -1)}[layout]
        full[rows] = numbers
        full = full + full.T
    np.fill_diagonal(full, 0.0)
    return full


def _geographical(at):
    """The report's own PI and radius, degrees and minutes as DDD.MM."""
    degrees = np.trunc(at)
    latitude, longitude = (3.141592 * (degrees + 5.0 * (at - degrees) / 3.0) / 180.0).T
    q1 = np.cos(longitude[:, None] - longitude)
    q2, q3 = np.cos(latitude[:, None] - latitude), np.cos(latitude[:, None] + latitude)
    return np.trunc(6378.388 * np.arccos(np.clip(0.5 * ((1.0 + q1) * q2 - (1.0 - q1) * q3), -1.0, 1.0)) + 1.0)


def read_optima(folder):
    """TSPLIB file name -> published optimum."""
    with open(folder / "optima.csv", newline="") as file:
        return {row["file"]: float(row["optimum"]) for row in csv.DictReader(file)}


def read_windowed(path):
    """(N, N) times and (N, 2) windows of an instance with windows."""
    words = [word for line in path.read_text().splitlines() for word in line.partition("#")[0].split()]
    size, numbers = int(words[0]), np.array(words[1:], dtype=float)
    return numbers[: size * size].reshape(size, size), numbers[size * size: size * size + 2 * size].reshape(size, 2)


def read_best_known(folder):
    """Rows of the best known values: file, best_travel, best_makespan and more."""
    with open(folder / "best_known.csv", newline="") as file:
        return list(csv.DictReader(file))
