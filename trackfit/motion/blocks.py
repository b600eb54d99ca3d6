"""Small matrices whose elements are vectors over steps: one product serves a whole track.

A matrix is a list of rows, a row a list of elements; an element is a vector over steps, or the
number 0 where the matrix has a structural zero. Written out so, XLA sees plain elementwise
arithmetic: reverse differentiation of stacked arrays would pad every slice to full size.
"""

from __future__ import annotations

from collections.abc import Iterable

import jax.numpy as jnp
from jaxtyping import Array, Float

Element = Float[Array, " steps"] | int
Matrix = list[list[Element]]
Vector = list[Element]


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
    return a if is_zero(b) else -b if is_zero(a) else a - b


def transposed(a: Matrix) -> Matrix:
    """Rows become columns."""
    return [list(column) for column in zip(*a, strict=True)]


def product(a: Matrix, b: Matrix) -> Matrix:
    """Matrix product at every step."""
    columns = transposed(b)
    return [[dot(row, column) for column in columns] for row in a]


def dot(a: Vector, b: Vector) -> Element:
    """Inner product at every step."""
    return total(times(x, y) for x, y in zip(a, b, strict=True))


def apply(a: Matrix, v: Vector) -> Vector:
    """Matrix times vector at every step."""
    return [dot(row, v) for row in a]


def both_axes(a: Matrix) -> Matrix:
    """Kronecker product with the 2 x 2 identity: the same matrix for both axes of the plane."""
    k = len(a)
    return [
        [a[p][q] if x == y else 0 for q in range(k) for y in range(2)]
        for p in range(k)
        for x in range(2)
    ]


def unpacked(array: Float[Array, "rows columns steps"]) -> Matrix:
    """An array as a matrix of vectors."""
    return [list(row) for row in array]


def packed(a: Matrix, steps: int) -> Float[Array, "rows columns steps"]:
    """A matrix of vectors as an array."""
    zeros = jnp.zeros(steps)
    return jnp.stack([jnp.stack([zeros if is_zero(e) else e for e in row]) for row in a])
