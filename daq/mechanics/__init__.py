"""Flexure formulae as free functions: numbers in, numbers out, each with its source. numpy only; no cards,
no files.

Symbols in the formulae: F total force, L support span, Li load span, a = (L - Li)/2, b width, h depth in the
loading direction, s deflection, E Young's modulus, nu Poisson's ratio. Units: N, mm, MPa, s unless the name
says otherwise. Nominal beam stress is what the other packages report; every correction here is a separate
number.
"""
