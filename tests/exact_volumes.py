"""Volumes of tets by rational numbers."""

from fractions import Fraction


def exact_volume(corners):
    """Six times the signed volume of a tet, as a rational number."""
    p = [[Fraction(float(c)) for c in q] for q in corners]
    a, b, c = ([q[k] - p[0][k] for k in range(3)] for q in p[1:])
    return (
        a[0] * (b[1] * c[2] - b[2] * c[1])
        + a[1] * (b[2] * c[0] - b[0] * c[2])
        + a[2] * (b[0] * c[1] - b[1] * c[0])
    )
