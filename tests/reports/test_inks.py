"""Inks: contrast, colour deficiency, grey, constancy."""

import itertools
import re
from importlib import resources

import numpy as np
import pytest

from idlearn.reports import inks
from idlearn.reports.inks import look_of

LOOKS = {
    "candidate": inks.CANDIDATE,
    "baseline": inks.BASELINE,
    "incumbent": inks.INCUMBENT,
    "floor": inks.FLOOR,
    **{f"other {i}": o for i, o in enumerate(inks.OTHERS)},
}
# G. M. Machado, M. M. Oliveira, L. A. F. Fernandes, A Physiologically-based Model for Simulation
# of Color Vision Deficiency, IEEE TVCG 15 (2009), severity 1.0 on linear RGB (from memory; the
# rows sum to 1, so that grey stays grey)
SIGHT = {
    "normal": np.eye(3),
    "protan": np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    "deutan": np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    ),
    "tritan": np.array(
        [
            [1.255528, -0.076749, -0.178779],
            [-0.078411, 0.930809, 0.147602],
            [0.004733, 0.691367, 0.303900],
        ]
    ),
}
# sRGB, D65 (IEC 61966-2-1)
TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def linear(colour: str) -> np.ndarray:
    c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def lab(rgb: np.ndarray) -> np.ndarray:
    x = TO_XYZ @ np.clip(rgb, 0, 1) / np.array([0.9505, 1.0, 1.089])
    f = np.where(x > 0.008856, np.cbrt(x), 7.787 * x + 16 / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def contrast(a: str, b: str) -> float:
    """Return the contrast ratio of WCAG 2.1."""
    one, two = sorted((float(TO_XYZ[1] @ linear(c)) for c in (a, b)), reverse=True)
    return (one + 0.05) / (two + 0.05)


def test_contrast_itself() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)  # WCAG 2.1, definition


def test_lines_stand_out_from_the_paper() -> None:
    # WCAG 2.1, 1.4.11: graphics need 3:1
    assert min(contrast(x.colour, inks.PAPER) for x in LOOKS.values()) >= 3


def test_letters_stand_out_from_what_is_behind_them() -> None:
    # WCAG 2.1, 1.4.3: text needs 4.5:1; the pairs are those of style.css and the pictures
    css = resources.files("idlearn.reports").joinpath("style.css").read_text()
    link, marked, on = "#153e5c", "#8a2710", "#f3ddd3"
    assert all(c in css for c in (link, marked, on))
    for text, ground in (
        (inks.INK, inks.PAPER),
        (inks.QUIET, inks.PAPER),
        (inks.QUIET, inks.WASH),
        (inks.INK, inks.WASH),
        (link, inks.PAPER),
        (marked, on),
        (inks.INK, on),
    ):
        assert contrast(text, ground) >= 4.5, (text, ground)
    # every colour that letters take is one of these or a variable
    letters = set(re.findall(r"(?<![-\w])color: (#\w+)", css))
    assert letters <= {link, marked}


@pytest.mark.parametrize("sight", SIGHT)
def test_inks_keep_apart_in_colour_deficiency(sight: str) -> None:
    seen = {n: lab(SIGHT[sight] @ linear(x.colour)) for n, x in LOOKS.items()}
    near = min(float(np.linalg.norm(seen[a] - seen[b])) for a, b in itertools.combinations(seen, 2))
    assert near > 10  # 2.3 is just noticeable side by side (CIE 1976)


def test_line_and_marker_tell_all_apart_without_colour() -> None:
    assert len({x.marker for x in LOOKS.values()}) == len(LOOKS)
    assert len({x.dash for x in LOOKS.values()}) == len(LOOKS)


def test_twelve_contenders_look_different_and_roles_keep_their_look() -> None:
    controllers = [{"name": f"c{i}", "kind": "classical"} for i in range(9)]
    controllers += [
        {"name": "now", "kind": "incumbent"},
        {"name": "new", "kind": "learned"},
        {"name": "least", "kind": "floor"},
    ]
    looks = look_of(controllers, "new", "c3")
    assert len(set(looks.values())) == 12
    assert looks["new"] == inks.CANDIDATE
    assert looks["c3"] == inks.BASELINE
    assert looks["now"] == inks.INCUMBENT
    assert looks["least"] == inks.FLOOR


def test_an_incumbent_that_is_the_baseline_looks_like_one() -> None:
    looks = look_of([{"name": "pid", "kind": "incumbent"}], "", "pid")
    assert looks["pid"] == inks.BASELINE
