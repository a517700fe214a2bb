"""The recovered cost: what a proximal-point run has learnt to price, as an object of its own.

The cost player's weights change from one iteration to the next and vanish near the saddle point, so no single iterate
is the cost. Their mean over the run is: the same argument that gives the rate for the mean of a game's strategies makes
the demonstrator nearly cheapest under it (Freund & Schapire 1999, "Adaptive game playing using multiplicative
weights"; from memory).
A cost is known only up to a constant and a positive factor, and only as far as the roll-outs have contradicted it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.errors import LearningError
from nearhand.service.learn.features import CostFeatures, Float64
from nearhand.service.policy.network import Float32

FORMAT = 1
REAL = ("action_mean", "action_sd", "centre", "scale")
ABSORBED = "having ended early"


@dataclass(frozen=True)
class RecoveredCost:
    """A cost of (window, applied action), linear in standardised features, and where it is measured.

    Attributes:
        rig: name of the rig.
        observations, actions: channel names; the features read them in this order.
        features: the feature map, on windows as the version's policy normalises them.
        weights: (k + 1,) the last one prices a period after a true terminal state.
        discount: of the run.
    """

    rig: str
    observations: tuple[str, ...]
    actions: tuple[str, ...]
    features: CostFeatures
    weights: Float64
    discount: float

    def names(self) -> list[str]:
        """Return a name for each of the k + 1 features, in their order."""
        one = [*self.observations, *self.actions]
        pairs = zip(self.features.rows, self.features.columns, strict=True)
        products = [f"{one[i]}²" if i == j else f"{one[i]} × {one[j]}" for i, j in pairs]
        ranks = [f"rank of {name}" for name in one]
        return [*one, *products, *ranks, *(f"{rank}, squared" for rank in ranks), ABSORBED]

    def prices(self) -> list[dict[str, Any]]:
        """Return each feature's price for one standard deviation, and its share, dearest first."""
        total = float(np.abs(self.weights).sum()) or 1.0
        rows = [
            {"feature": name, "price": float(weight), "share": float(abs(weight)) / total}
            for name, weight in zip(self.names(), self.weights, strict=True)
        ]
        return sorted(rows, key=lambda row: -row["share"])

    def words(self, most: int = 3) -> str:
        """Return in a sentence what is priced most."""
        parts = [
            f"{'more' if row['price'] > 0 else 'less'} of {row['feature']} ({row['share']:.0%})"
            for row in self.prices()[:most]
        ]
        return f"it charges most for {'; '.join(parts)}, against what the demonstrations show on average"

    def of_episodes(self, windows: Float32, actions: Float32, lengths: NDArray[np.int64], ended: Any) -> Float64:
        """Return the mean cost a period of B episodes (B,), each over the T periods it could have had.

        Args:
            windows: (B, T + 1, d).
            actions: (B, T, m) as applied, in half ranges.
            lengths: (B,) periods lived.
            ended: (B,) true where the episode ended in a terminal state; it then counts on as absorbed.
        """
        count, periods = actions.shape[:2]
        rows = self.features(windows[:, :-1].reshape(count * periods, -1), actions.reshape(count * periods, -1))
        each = (rows.astype(np.float64) @ self.weights[:-1]).reshape(count, periods)
        lived = np.arange(periods) < lengths[:, None]
        total = np.where(lived, each, 0.0).sum(axis=1) + np.where(ended, periods - lengths, 0) * self.weights[-1]
        return np.asarray(total / np.where(ended, periods, np.maximum(lengths, 1)))

    def to_map(self) -> dict[str, Any]:
        """Return the cost as a JSON map; :func:`read_cost` takes it back."""
        found = self.features
        return {
            "format": FORMAT,
            "rig": self.rig,
            "observations": list(self.observations),
            "actions": list(self.actions),
            "discount": self.discount,
            "weights": self.weights.tolist(),
            "features": {
                **{name: getattr(found, name).astype(np.float64).tolist() for name in REAL},
                "products": np.stack([found.rows, found.columns], axis=1).tolist(),
                "knots": found.knots.tolist(),
                "scores": found.scores.tolist(),
            },
            "names": self.names(),
            "words": self.words(),
        }


def read_cost(content: Mapping[str, Any]) -> RecoveredCost:
    """Return the cost that :meth:`RecoveredCost.to_map` wrote.

    Raises:
        LearningError: something is missing, of the wrong size, or not finite.
    """
    try:
        if content["format"] != FORMAT:
            raise ValueError(f"format {content['format']!r}, expected {FORMAT}")
        observations, actions = (tuple(str(one) for one in content[key]) for key in ("observations", "actions"))
        table = content["features"]
        n, size = len(observations), len(observations) + len(actions)
        products = np.asarray(table["products"], dtype=np.int64).reshape(-1, 2)
        if products.size and not (products.min() >= 0 and products.max() < size):
            raise ValueError("a product names a coordinate that is not there")
        real = {name: np.asarray(table[name], dtype=np.float32) for name in REAL}
        scores = np.asarray(table["scores"], dtype=np.float64)
        knots = np.asarray(table["knots"], dtype=np.float64)
        weights = np.asarray(content["weights"], dtype=np.float64)
        k = 3 * size + len(products)
        shapes: dict[str, tuple[NDArray[Any], tuple[int, ...]]] = {
            "weights": (weights, (k + 1,)), "knots": (knots, (len(scores), size)),
            "action_mean": (real["action_mean"], (len(actions),)), "action_sd": (real["action_sd"], (len(actions),)),
            "centre": (real["centre"], (k,)), "scale": (real["scale"], (k,)),
        }  # fmt: skip
        for name, (array, shape) in shapes.items():
            if array.shape != shape or not np.isfinite(array).all():
                raise ValueError(f"{name} must be {shape} finite numbers, found shape {array.shape}")
        discount = float(content["discount"])
        if not (0 < discount < 1 and math.isfinite(discount) and (real["scale"] > 0).all()):
            raise ValueError("discount must lie in (0, 1) and every scale be positive")
        features = CostFeatures(
            n=n, rows=products[:, 0], columns=products[:, 1], knots=knots, scores=scores, **real,
        )  # fmt: skip
        return RecoveredCost(str(content["rig"]), observations, actions, features, weights, discount)
    except (KeyError, TypeError, ValueError) as error:
        raise LearningError(
            f"this is no recovered cost: {error}; distil a proximal-online version and export its cost again",
            code="learn.cost",
        ) from error
