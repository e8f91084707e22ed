"""Preferred ratings of distribution transformers."""

from __future__ import annotations

#: Preferred ratings [kVA] by number of phases; a trade reference attributes them to IEEE C57.12.00 (seen).
PREFERRED_RATINGS_KVA: dict[int, tuple[float, ...]] = {
    1: (5, 10, 15, 25, 37.5, 50, 75, 100, 167, 250, 333, 500),
    3: (15, 30, 45, 75, 112.5, 150, 225, 300, 500, 750, 1000, 1500, 2000, 2500),
}
