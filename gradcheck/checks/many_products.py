"""What products with many entries come to: a few entries that are told, counts of the others, examples by unit vectors.

The entries of H·v show which rows of the Hessian are wrong; unit vectors show which second derivatives.
"""

from dataclasses import replace

import numpy as np

from gradcheck.checks.along import places
from gradcheck.checks.confirmed_slopes import Slopes
from gradcheck.checks.curvature import Curvatures, Seen, WrongRows
from gradcheck.checks.curvature_along_vectors import WORST, Product, Witness, products_along
from gradcheck.checks.parts import appended, entries_from, picked
from gradcheck.checks.products_claimed import claimed_products
from gradcheck.checks.vectors import Vectors
from gradcheck.claims.desk import Examined
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.report import DirectionChecks, Entries
from gradcheck.records.verdict import Verdict
from gradcheck.wording import count, number

#: Wrong rows up to which the columns of all their variables are looked at; of more, so many columns are.
NARROWED_MOST, EXAMPLES = 50, 4
#: Entries of one product that are told.
TOLD = 5


def along_vectors(look: Curvatures, slopes: Slopes, source: str, *, contradicted: bool) -> Seen:
    """The claimed products held against differences of the gradient; `source` is what these are called."""
    products = [_sourced(each, source) for each in products_along(look, slopes, contradicted=contradicted)]
    entries = _entries(look, products)
    refuted = [product for product in products if product.verdict == Verdict.REFUTED]
    notices = (_visible(look, products), *_left_open(look, products))
    seen = Seen(entries=entries, directions=_directions(products), notices=notices)
    if not refuted:
        return seen
    off = np.logical_or.reduce([product.off for product in refuted])
    seen = replace(seen, wrong=_wrong_rows(look, refuted, off))
    return _with_examples(look, slopes, source, seen, off, refuted)


def _sourced(product: Product, source: str) -> Product:
    named = np.where(product.examined.source == "", "", source).astype(object)
    return replace(product, examined=replace(product.examined, source=named))


def _entries(look: Curvatures, products: list[Product]) -> Entries:
    parts = []
    for product in products:
        told = product.told[:TOLD]
        names = [look.name(look.row_name(int(place)), f"random v {product.number + 1}", unit=False) for place in told]
        index = places(look.places[told], np.array([look.layout.size + product.number]))
        parts.append(entries_from(picked(product.examined, slice(told.size)), index, names))
    whole = parts[0]
    for part in parts[1:]:
        whole = appended(whole, part)
    return whole


def _left_open(look: Curvatures, products: list[Product]) -> tuple[str, ...]:
    """How much of the undecided products is open: the report tells a few entries only."""
    undecided = [product for product in products if product.verdict == Verdict.UNDECIDED]
    most = max((product.left_open for product in undecided), default=0)
    if most <= TOLD:
        return ()
    return (f"up to {most:,} of {count(look.places.size, 'entry', 'entries')} of a product H·v are left open",)


def _directions(products: list[Product]) -> DirectionChecks:
    """One line a vector: the entry of the product that agrees least."""
    first = [product.examined for product in products]
    return DirectionChecks(
        claim=np.array([examined.claim[0, 0] for examined in first]),
        witness=np.array([examined.value[0, 0] for examined in first]),
        bound=np.array([examined.bound[0, 0] for examined in first]),
        verdict=tuple(product.verdict for product in products),
    )


def _wrong_rows(look: Curvatures, refuted: list[Product], off: BoolArray) -> WrongRows:
    ratios = np.array([product.ratio for product in refuted])
    alike = np.isfinite(ratios).all() and float(np.ptp(ratios)) <= 1e-6 * abs(float(ratios[0]))
    first = [look.row_name(int(place)) for place in np.flatnonzero(off)[:WORST]]
    return WrongRows(
        many=int(off.sum()),
        of=int(off.size),
        vectors=len(refuted),
        ratio=float(ratios[0]) if alike else float("nan"),
        names=tuple(first),
    )


def _visible(look: Curvatures, products: list[Product]) -> str:
    """What random directions would have seen of an error in any one entry."""
    n = look.layout.size
    looked = f"{count(n, 'variable')}: looked at along {count(len(products), 'random direction')}"
    if look.outputs == 1:
        looked += f", all {count(look.able.size, 'entry', 'entries')} of each H·v compared"
    if any(product.verdict == Verdict.REFUTED for product in products):
        return looked
    least = np.full(look.places.size, np.inf)
    for product in products:
        reach = float(np.abs(look.claimed.vectors.random[product.number, look.able]).min())
        claim = look.claimed.random[product.number][look.places]
        with np.errstate(invalid="ignore", over="ignore"):
            off = product.allowed + look.measure.rel_tol * np.abs(claim) + 4 * product.bound
        least = np.fmin(least, off / reach)
    if not np.isfinite(least).any():
        return looked
    size = number(float(least[np.isfinite(least)].max()), 2)
    return f"{looked}; an error of {size} in a single entry would have been seen"


# --- examples by unit vectors ----------------------------------------------------------------------------------------


def _with_examples(
    look: Curvatures, slopes: Slopes, source: str, seen: Seen, off: BoolArray, refuted: list[Product]
) -> Seen:
    """Columns of the variables whose rows are wrong: a Hessian is symmetric, and so are most mistakes."""
    columns = np.unique(look.places[off] % look.layout.size)
    few = columns.size <= NARROWED_MOST
    if not few:
        worst = np.concatenate([product.told for product in refuted])
        _, first = np.unique(look.places[worst] % look.layout.size, return_index=True)
        columns = np.sort((look.places[worst] % look.layout.size)[np.sort(first)[:EXAMPLES]])
    claims = _claimed_columns(look, columns)
    scale = look.session.subject.domain.scale[columns]
    witness = Witness(look, slopes, claims, scale)
    rows = _suspected(look, witness, claims, columns)
    if rows.size == 0:
        return seen
    found = witness.examined(claims[:, look.places[rows]].T, rows, columns=columns)
    wrong = np.asarray(found.verdict == Verdict.REFUTED)
    if not wrong.any():
        return seen
    found = replace(found, source=np.where(found.source == "", "", source).astype(object))
    return _replaced(look, seen, found, wrong, rows, columns, few=few)


def _claimed_columns(look: Curvatures, columns: IntArray) -> Array:
    vectors = Vectors(units=columns, random=look.claimed.vectors.random[:2])
    return claimed_products(look.session, look.function, look.kind, vectors).units


def _suspected(look: Curvatures, witness: Witness, claims: Array, columns: IntArray) -> IntArray:
    """Judged entries that a quick look sees to be off in one of the columns, a few of each."""
    rows = [np.zeros(0, np.intp)]
    for claim, column in zip(claims, columns.tolist(), strict=True):
        seen = witness.glance(claim[look.places], column=column)
        if seen.cut_short:
            break
        off = np.flatnonzero(seen.off | ~np.isfinite(claim[look.places]))
        rows.append(off[np.argsort(-seen.excess[off], kind="stable")[:WORST]])
    return np.unique(np.concatenate(rows))


def _replaced(
    look: Curvatures, seen: Seen, found: Examined, wrong: BoolArray, rows: IntArray, columns: IntArray, *, few: bool
) -> Seen:
    """The entries of the Hessian that were found wrong, in place of the products."""
    labels = [look.layout.name(int(j)) for j in columns]
    names = np.array(
        [[look.name(look.row_name(int(row)), label, unit=True) for label in labels] for row in rows], dtype=object
    )
    at = np.argwhere(wrong)
    index = np.stack([look.places[rows[at[:, 0]]], columns[at[:, 1]]], axis=1)
    looked = f"{count(columns.size, 'column')} of the variables in question {'was' if columns.size == 1 else 'were'}"
    notice = f"after random directions the {looked} looked at; what was found wrong there is told"
    if not few:
        notice = (
            f"after random directions {count(columns.size, 'unit vector')} showed examples of wrong second "
            "derivatives, which are told; there are more"
        )
    return replace(
        seen,
        entries=entries_from(picked(found, wrong), index, names[wrong].tolist()),
        narrowed=found,
        names=names,
        few=few,
        notices=(*seen.notices, notice),
    )
