"""What the compiled march reads and writes: plain arrays in named tuples.

A *lane* is the place of one loan in a row that is worked on at once; a *chunk* is up to LANES loans that share cell
and table row; a *run* is up to RUN_CHUNKS chunks of one cell, whose sums are added up lane by lane before the lanes are.
``slots`` are the lanes of all chunks one after the other, chunks padded to a multiple of PAD; a padding lane has
weight 0 everywhere. S paths, C causes (the first is default, the second payoff where there is one), H steps.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

LANES = 64
PAD = 8
RUN_CHUNKS = 16

#: Per loan and path, in this order: probabilities, then amounts, then parts of the lifetime PD.
LOAN_ROWS = (
    "pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime", "el_12m", "el_lifetime", "exposed_lifetime",
    "extrapolated", "beyond_path",
)  # fmt: skip
#: Per cell, path and step, in this order. ``matured`` is the flow into maturity in the step.
CELL_ROWS = ("on_book", "matured", "default", "payoff", "balance", "default_amount", "exposed", "el")
#: Per loan, path and bucket of steps, in this order; survival is that of the hazards, maturity aside.
YEAR_ROWS = ("default", "payoff", "survival", "balance", "default_amount", "loss", "el")


class Book(NamedTuple):
    """Loans in lanes; nothing in it depends on a path, except ``a`` through the coefficients.

    a (C, slots)   e^s of each cause
    v, annuity, scale (slots,)  balance after k payments = scale * A(term - k), with A(0) = 0 and A(j + 1) = 1 + v A(j):
                   v = 1 / (1 + rate) for an annuity, 1 for linear, 0 for bullet; annuity = A(term - cap), or 0
    up             EAD / balance
    w, d0          discount factor of one step, and what times w is that of the first
    lgd            fraction of EAD
    term, life     steps to maturity, and steps projected
    loan, present  place of the loan among all, and 1; -1 and 0 for padding
    start, size, row, steps, least (chunks,)  first slot, slots, table row, longest life, shortest life
    own, key (chunks,)  number of steps until the ages pass the last supported one, and row of ``after``
    top (C, chunks)  largest a
    cut (runs + 1,), slot (runs,)  chunks of each run, and the row of sums it is added to
    """

    a: Floats
    v: Floats
    annuity: Floats
    scale: Floats
    up: Floats
    w: Floats
    d0: Floats
    lgd: Floats
    term: Floats
    life: Floats
    loan: Ints
    present: Floats
    start: Ints
    size: Ints
    row: Ints
    steps: Ints
    least: Ints
    own: Ints
    key: Ints
    top: Floats
    cut: Ints
    slot: Ints


class Paths(NamedTuple):
    """b (S, C, rows, H) e^z by table row; links (C,); after (S, keys, H) steps that rest on what follows the last given value;
    year: steps of the first twelve months; edges (Y,) last step of each bucket, empty where nobody asks."""

    b: Floats
    links: Ints
    after: Bools
    year: int
    edges: Ints


class Dense(NamedTuple):
    """Values of its own for every loan and step, (.., H, slots), for books that do not factor; empty where they do.

    x (C', H, slots)       e^eta of causes that do not factor; at (C,) row of a cause in it, or -1 where it factors
    top (C', H)            largest of a step
    balance (H + 1, slots) after 0, 1, .. payments; exposure, discount, lgd (H, slots): together or not at all
    """

    x: Floats
    at: Ints
    top: Floats
    balance: Floats
    exposure: Floats
    discount: Floats
    lgd: Floats


class Ratios(NamedTuple):
    """A moving number that is balance over an indexed value, as one term of a cause's eta; M of them, none where nothing moves.

    cause (M,)       row of the cause in a
    slope (M,)       what a unit adds to eta, or the logarithm of one
    logged (M,)      whether the logarithm counts
    c (S, M, slots)  index when the value was taken, over the value
    which (M, slots) row of the index; first (M, slots) step before which it does not move
    inverse (S, M, G, H)  1 / index at the start of each step
    """

    cause: Ints
    slope: Floats
    logged: Bools
    c: Floats
    which: Ints
    first: Ints
    inverse: Floats


class Out(NamedTuple):
    """loans (S, n, LOAN_ROWS) of the whole book; sums (S, rows of sums, CELL_ROWS, H), added to; years (S, Y, YEAR_ROWS, slots)."""

    loans: Floats
    sums: Floats
    years: Floats
