"""The unit attributes that simulation codes write beside a dataset, in their three vocabularies."""

from __future__ import annotations

import numpy as np

KPC_CM = 3.0856775814913673e21  # IAU 2015 resolution B2 parsec
MSUN_G = 1.988409870698051e33  # IAU 2015 nominal GM over CODATA 2018 G


def first_words(a: float, h: float, factor: float, dims: dict[str, float], physical: int = 0) -> dict:
    """Unit attributes in the first vocabulary."""
    return {
        "Conversion factor to CGS (not including cosmological corrections)": np.array([factor]),
        "a-scale exponent": np.array([a], dtype="f4"),
        "h-scale exponent": np.array([h], dtype="f4"),
        "Value stored as physical": np.array([physical], dtype="u1"),
        **{f"U_{base} exponent": np.array([dims.get(base, 0.0)], dtype="f4") for base in "LMtTI"},
    }


def second_words(a: float, h: float, factor: float, length: float = 0, mass: float = 0, velocity: float = 0) -> dict:
    """Unit attributes in the second vocabulary."""
    return {
        "to_cgs": factor,
        "a_scaling": a,
        "h_scaling": h,
        "length_scaling": length,
        "mass_scaling": mass,
        "velocity_scaling": velocity,
    }


def third_words(a: float, h: float, factor: float) -> dict:
    """Unit attributes in the third vocabulary."""
    return {"CGSConversionFactor": factor, "aexp-scale-exponent": np.float32(a), "h-scale-exponent": np.float32(h)}
