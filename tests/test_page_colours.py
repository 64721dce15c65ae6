"""What eyes need of the report's colours: contrast, and kinds that colour-blind readers tell apart."""

import re
from importlib.resources import files
from itertools import combinations

import numpy as np
import pytest


def colours(dark: bool) -> dict[str, np.ndarray]:
    """The style sheets' colours, linear RGB in 0 to 1 (IEC 61966-2-1)."""
    css = "".join(files("pipeline.page").joinpath(name).read_text() for name in ("page.css", "desk.css"))
    blocks = re.findall(r"(@media \(prefers-color-scheme: dark\) \{\s*)?:root[^{]*\{([^}]*)\}", css)
    found: dict[str, np.ndarray] = {}
    for in_dark, block in blocks:
        if dark or not in_dark:
            for name, value in re.findall(r"--([\w-]+): #([0-9a-f]{6})", block):
                coded = np.array([int(value[k : k + 2], 16) for k in (0, 2, 4)]) / 255
                found[name] = np.where(coded <= 0.04045, coded / 12.92, ((coded + 0.055) / 1.055) ** 2.4)
    return found


def contrast(a: np.ndarray, b: np.ndarray) -> float:
    """WCAG 2.2, contrast ratio of relative luminances."""
    low, high = sorted(float(c @ [0.2126, 0.7152, 0.0722]) for c in (a, b))
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("dark", [False, True])
def test_text_and_marks_stand_out(dark: bool) -> None:
    """WCAG 2.2, 1.4.3: text 4.5 to 1; 1.4.11: marks 3 to 1."""
    found = colours(dark)
    for ground in ("paper", "card", "faint", "belt"):
        for text in ("ink", "soft", "deep", "alarm"):
            assert contrast(found[text], found[ground]) >= 4.5, (text, ground)
        for name in [*(f"kind-{k}" for k in range(6)), "kind-unknown"]:
            assert contrast(found[name], found[ground]) >= 3.0, (name, ground)


# Machado, Oliveira, Fernandes, IEEE TVCG 15(6), 2009, table 1, severity 1.0 (from memory)
BLIND = {
    "none": np.eye(3),
    "protan": np.array([[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
                        [-0.003882, -0.048116, 1.051998]]),
    "deutan": np.array([[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
                        [-0.011820, 0.042940, 0.968881]]),
}  # fmt: skip


def lab(linear: np.ndarray) -> np.ndarray:
    """CIELAB under D65 (CIE 15; sRGB primaries)."""
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
    t = to_xyz @ np.clip(linear, 0, 1) / [0.9505, 1.0, 1.089]
    f = np.where(t > (6 / 29) ** 3, np.cbrt(t), t / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("dark", [False, True])
@pytest.mark.parametrize("sight", BLIND)
def test_kinds_are_told_apart_by_colour_blind_readers(dark: bool, sight: str) -> None:
    """By ten units of CIELAB at least; shapes tell them apart besides."""
    seen = [lab(BLIND[sight] @ colours(dark)[f"kind-{k}"]) for k in range(6)]
    assert min(float(np.linalg.norm(a - b)) for a, b in combinations(seen, 2)) > 10
