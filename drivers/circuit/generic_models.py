"""Generic devices that stand in for "a wrong part": round figures of each kind, no particular type.

The figures are common practice for small-signal parts, from memory.
"""

from __future__ import annotations

from collections.abc import Mapping

from drivers.circuit.cards import Model

_SILICON = (
    ("is", "1e-14"),
    ("bf", "200"),
    ("br", "4"),
    ("vaf", "80"),
    ("ise", "1e-14"),
    ("ne", "1.6"),
    ("cje", "12p"),
    ("cjc", "4p"),
    ("tf", "0.5n"),
    ("rb", "50"),
)
_GERMANIUM = (
    ("is", "0.8u"),
    ("bf", "80"),
    ("br", "8"),
    ("vaf", "60"),
    ("ise", "0.3u"),
    ("ne", "1.8"),
    ("isc", "1.6u"),
    ("nc", "1.2"),
    ("eg", "0.67"),
    ("xtb", "0.8"),
    ("cje", "40p"),
    ("vje", "0.3"),
    ("mje", "0.4"),
    ("cjc", "14p"),
    ("vjc", "0.4"),
    ("mjc", "0.4"),
    ("tf", "60n"),
    ("rb", "60"),
)
_MODELS: Mapping[str, tuple[str, tuple[tuple[str, str], ...]]] = {
    "silicon npn": ("npn", _SILICON),
    "silicon pnp": ("pnp", _SILICON),
    "germanium npn": ("npn", _GERMANIUM),
    "germanium pnp": ("pnp", _GERMANIUM),
    "silicon diode": ("d", (("is", "2.5n"), ("n", "1.75"), ("rs", "0.6"), ("cjo", "4p"), ("tt", "6n"))),
    "germanium diode": ("d", (("is", "0.2u"), ("n", "1.4"), ("rs", "7"), ("eg", "0.67"), ("cjo", "1p"))),
    "red led": ("d", (("is", "1e-19"), ("n", "1.9"), ("rs", "2"), ("eg", "1.9"), ("cjo", "30p"))),
}


def generic_model(words: str) -> Model | None:
    """Return the generic model called e.g. ``silicon npn``, None when there is none of that name."""
    found = _MODELS.get(" ".join(words.lower().split()))
    if found is None:
        return None
    kind, parameters = found
    return Model("generic_" + "_".join(words.lower().split()), kind, parameters)
