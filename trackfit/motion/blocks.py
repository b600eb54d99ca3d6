"""Small matrices whose elements are vectors over steps: one product serves a whole track.

A matrix is a list of rows, a row a list of elements; an element is a vector over steps, or the
number 0 where the matrix has a structural zero. Written out so, XLA sees plain elementwise
arithmetic: reverse differentiation of stacked arrays would pad every slice to full size.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

Element = Float[Array, " steps"] | int
Vector = Sequence[Element]
Matrix = Sequence[Sequence[Element]]


def is_zero(element: Element) -> bool:
    """Whether an element is a structural zero."""
    return isinstance(element, int) and element == 0


def total(elements: Iterable[Element]) -> Element:
    """Sum, passing over structural zeros."""
    result: Element = 0
    for element in elements:
        if not is_zero(element):
            result = element if is_zero(result) else result + element
    return result


def times(a: Element, b: Element) -> Element:
    """Product; zero where either is a structural zero."""
    return 0 if is_zero(a) or is_zero(b) else a * b


def minus(a: Element, b: Element) -> Element:
    """Difference, passing over structural zeros."""
    if is_zero(b):
        return a
    return -b if is_zero(a) else a - b


def transposed(a: Matrix) -> list[list[Element]]:
    """Rows become columns."""
    return [list(column) for column in zip(*a, strict=True)]


def product(a: Matrix, b: Matrix) -> list[list[Element]]:
    """Matrix product at every step."""
    columns = transposed(b)
    return [[dot(row, column) for column in columns] for row in a]


def dot(a: Vector, b: Vector) -> Element:
    """Inner product at every step."""
    return total(times(x, y) for x, y in zip(a, b, strict=True))


def apply(a: Matrix, v: Vector) -> list[Element]:
    """Matrix times vector at every step."""
    return [dot(row, v) for row in a]


def both_axes(a: Matrix) -> list[list[Element]]:
    """Kronecker product with the 2 x 2 identity: the same matrix for both axes of the plane."""
    k = len(a)
    return [
        [a[p][q] if x == y else 0 for q in range(k) for y in range(2)]
        for p in range(k)
        for x in range(2)
    ]


def symmetric(a: Matrix) -> list[list[Element]]:
    """The upper triangle mirrored: what rounding made unequal is made equal."""
    return [[a[min(r, c)][max(r, c)] for c in range(len(a))] for r in range(len(a))]


def inverse(a: Matrix) -> list[list[Element]]:
    """Inverses of symmetric positive definite matrices, by halving (Schur complements)."""
    n = len(a)
    if n == 1:
        return [[jnp.reciprocal(a[0][0])]]
    half = n // 2
    top = inverse([row[:half] for row in a[:half]])
    right = [row[half:] for row in a[:half]]
    across = product(top, right)
    low = [row[half:] for row in a[half:]]
    drop = product(transposed(right), across)
    corner = inverse(
        [[minus(x, y) for x, y in zip(p, q, strict=True)] for p, q in zip(low, drop, strict=True)]
    )
    off = product(across, corner)
    back = product(off, transposed(across))
    first = [
        [total((x, y)) for x, y in zip(p, q, strict=True)] for p, q in zip(top, back, strict=True)
    ]
    side = [[minus(0, e) for e in row] for row in off]
    upper = [p + q for p, q in zip(first, side, strict=True)]
    lower = [p + q for p, q in zip(transposed(side), corner, strict=True)]
    return upper + lower


def kept(a: Matrix) -> Matrix:
    """The same matrix, computed once: else XLA works it out anew for every element it serves.

    Long chains of products would take several times as long.
    """
    computed = iter(jax.lax.optimization_barrier([e for row in a for e in row if not is_zero(e)]))
    return [[e if is_zero(e) else next(computed) for e in row] for row in a]


def unpacked(array: Float[Array, "rows columns steps"]) -> list[list[Element]]:
    """An array as a matrix of vectors."""
    return [list(row) for row in array]


def packed(a: Matrix, steps: int) -> Float[Array, "rows columns steps"]:
    """A matrix of vectors as an array."""
    zeros = jnp.zeros(steps)
    return jnp.stack([jnp.stack([zeros if is_zero(e) else e for e in row]) for row in a])
