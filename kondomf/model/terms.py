"""Collects one-body and quartic terms and turns them into channels, fields h and the quadratic form V."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Operator = tuple[int, tuple[int, int]]
"""A Majorana of the cell at lattice vector R: (number, R)."""
Key = tuple[int, int, int, int]
"""A channel i gamma_a(0) gamma_b(R): (a, b, R1, R2)."""


def canonical(first: Operator, second: Operator) -> tuple[Key, int]:
    """Channel and sign of i gamma_first gamma_second; each bilinear has one stored orientation."""
    (a, (a1, a2)), (b, (b1, b2)) = first, second
    shift = (b1 - a1, b2 - a2)
    forward, backward = (a, b, *shift), (b, a, -shift[0], -shift[1])
    if forward == backward:
        raise ValueError(f"i gamma gamma of one Majorana ({a}) is a constant, not a channel")
    return (forward, 1) if forward < backward else (backward, -1)


@dataclass
class Terms:
    """A growing Hamiltonian. `magnetic` keeps the first product of the Wick sum between on-site spin bilinears."""

    magnetic: bool
    channels: dict[Key, int] = field(default_factory=dict)
    one_body: dict[int, float] = field(default_factory=dict)
    quadratic: dict[tuple[int, int], float] = field(default_factory=dict)

    def channel(self, first: Operator, second: Operator) -> tuple[int, int]:
        """Number and sign of a channel, which is created when new."""
        key, sign = canonical(first, second)
        return self.channels.setdefault(key, len(self.channels)), sign

    def add_one_body(self, coefficient: float, first: Operator, second: Operator) -> None:
        """Add coefficient * i gamma_first gamma_second."""
        if coefficient:
            p, sign = self.channel(first, second)
            self.one_body[p] = self.one_body.get(p, 0.0) + sign * coefficient

    def add_quartic(self, coefficient: float, a: Operator, b: Operator, c: Operator, d: Operator) -> None:
        """Add coefficient * (i g_a g_b)(i g_c g_d), decoupled by Wick: P_ab P_cd - P_ac P_bd + P_ad P_bc."""
        if not coefficient:
            return
        pairs = [(coefficient, (a, b), (c, d))] if self.magnetic else []
        pairs += [(-coefficient, (a, c), (b, d)), (coefficient, (a, d), (b, c))]
        for value, left, right in pairs:
            p, sign_p = self.channel(*left)
            q, sign_q = self.channel(*right)
            for key in ((p, q), (q, p)):
                self.quadratic[key] = self.quadratic.get(key, 0.0) + value * sign_p * sign_q

    def arrays(self) -> tuple[NDArray, NDArray, NDArray]:
        """Channel table (N, 4) of a, b, R1, R2; one-body fields h (N,); quadratic form V (N, N)."""
        n = len(self.channels)
        table = np.array(list(self.channels), dtype=np.int64).reshape(n, 4)
        h = np.zeros(n)
        v = np.zeros((n, n))
        for p, value in self.one_body.items():
            h[p] = value
        for key, value in self.quadratic.items():
            v[key] = value
        return table, h, v
