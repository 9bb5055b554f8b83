"""Forms of the energy per site against the number of sites N: what is fitted freely, and what the rest may look like.

With x = N^(1/d), the linear size in d dimensions, every form reads

    E/N = e + [open boundaries: b/x] + x^-p exp(-(x - x_0)/xi) (a + x^-r c(ln x)),

with x_0 the smallest size, e (and b) free, a constant and c a smooth function of ln x of unknown size. Which powers: at
a critical chain the leading correction is 1/N^2 for rings (Bloete, Cardy, Nightingale 1986; Affleck 1986), for open
chains 1/N^2 after the boundary's 1/N. In d > 1 with linearly dispersing modes it is x^-(d+1) for tori (Neuberger, Ziman
1989; Hasenfratz, Niedermayer 1993); gapped systems approach exponentially. Marginal operators multiply the leading term
by functions of ln N (Affleck, Gepner, Schulz, Ziman 1989), 1/ln^3 N for rings. In chains of larger half-integer spin
their size is not small, and the crossover to the asymptotic law is slow (S = 3/2: Hallberg, Wang, Horsch, Moreo 1996);
the same holds for chains shorter than a long correlation length, whose coefficient grows with the size (r < 0). Neither
is known beforehand, so c is not a power or a logarithm but any function that changes little while ln x changes by
`span`: a Gaussian random function with rational quadratic covariance (Rasmussen, Williams 2006, section 4.2).

Tori and patches of different shape, as 10, 16 and 20 sites of the square lattice, have amplitudes that depend on the
shape (Hasenfratz, Niedermayer 1993), and no smooth law in N alone: there a may be large and c jumps from size to size.
Citations from memory."""

import functools
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

SPANS = (0.7, 1.4, 2.8)
"""Changes of ln x over which c may vary: sizes differing by factors 2, 4 and 16. A longer one would deny the slow
crossover of S = 3/2 chains, shorter ones only widen the errors."""
SHORT_SPAN = 0.02
"""c independent from size to size: even and odd sizes together, clusters of different shape."""
STEADY = 2.0
"""The constant a may be this many times larger than c; for clusters of similar shape, IRREGULAR times."""
IRREGULAR = 60.0
LOGARITHMS = (0.03, 0.1, 0.3)
"""The length in the logarithm, in units of the smallest size."""
LENGTHS = 14
FAR = 4.0
"""Correlation lengths: LENGTHS of them, up to this many times the range of sizes."""
RARE = 0.2
"""Weight before any data of rings far below their correlation length, of even sizes that do not follow one smooth law,
and of clusters of different shape that do."""
CROSSOVER = -0.75
"""Extra power r of open chains below a correlation length, where the coefficient of 1/N^2 grows with the size: between
0, that of a critical chain with slowly varying coefficients, and -1, where the energy of the ends itself varies."""
UNCOMMON = 0.5
"""Weight of that form beside the others of its kind: a larger one widens limits of chains that are long enough."""
LEADING = {
    ("open", 1): 2,
    ("periodic", 1): 2,
    ("open", 2): 2,
    ("periodic", 2): 3,
    ("open", 3): 2,
    ("periodic", 3): 4,
}


@dataclass(frozen=True)
class Form:
    """One form; its letters as at the head of the file.

    power p, extra r, span of c, length xi; steady: size of a beside c (0: no a); logarithm: scale of a further term
    a' / ln^3(x / (logarithm x_0)) beside a, or 0; weight: how likely this kind is beside the others before any data.
    """

    boundary: str
    dimension: int
    kind: str
    power: float
    span: float
    extra: float = 0.0
    length: float = np.inf
    steady: float = STEADY
    logarithm: float = 0.0
    weight: float = 1.0

    @property
    def name(self) -> str:
        """For people, in powers of N."""
        one, leading, next_one = (_power(p, self.dimension) for p in (1, self.power, self.power + self.extra))
        if self.boundary == "open" and self.kind == "growing" and self.power == 1:
            return f"slowly varying {one}"
        return (f"{one} + " if self.boundary == "open" else "") + {
            "slow": f"slowly varying {leading}",
            "irregular": f"{leading}, irregular",
            "growing": f"{leading} + varying {next_one}",
            "next": f"{leading} + varying {next_one}",
            "logarithm": f"{leading} with logarithm + varying {next_one}",
            "exponential": "exponential",
        }[self.kind]

    @property
    def width(self) -> int:
        """How many coefficients are free."""
        return 2 if self.boundary == "open" else 1

    def fixed(self, x, first):
        """Columns (n, 1 or 2) with free coefficients."""
        return np.stack([np.ones(len(x)), first / x][: self.width], axis=1)

    def _envelope(self, x, first):
        return (first / x) ** self.power * np.exp(-(x - first) / self.length)

    def _steady(self, x, first):
        """Columns (n, 2) of a and a', the envelope left out."""
        columns = np.zeros((len(x), 2))
        columns[:, 0] = self.steady
        if self.logarithm:
            columns[:, 1] = (np.log(self.logarithm) / np.log(self.logarithm * first / x)) ** 3
        return columns

    def random(self, x, first):
        """Columns (n, n + 2) whose coefficients are independent and of one unknown size: the rest of the form."""
        rough = (first / x)[:, None] ** self.extra * _root(tuple(np.log(x).tolist()), self.span)
        return self._envelope(x, first)[:, None] * np.hstack([self._steady(x, first), rough])

    def trend(self, x, other, first):
        """As covariance, but only what clusters of different shape have in common."""
        return self.covariance(x, other, first, common=self.kind == "irregular")

    def covariance(self, x, other, first, common=False):
        """Of the rest between sizes x (n,) and other (m,)."""
        rough = rational_quadratic(np.log(x)[:, None] - np.log(other), self.span) * (not common)
        rough *= np.outer((first / x) ** self.extra, (first / other) ** self.extra)
        steady = self._steady(x, first) @ self._steady(other, first).T
        return np.outer(self._envelope(x, first), self._envelope(other, first)) * (steady + rough)


def rational_quadratic(distance, span):
    return 1 / (1 + 0.5 * (distance / span) ** 2)


@functools.lru_cache(maxsize=64)
def _root(logs, span):
    logs = np.array(logs)
    return np.linalg.cholesky(rational_quadratic(logs[:, None] - logs, span) + 1e-13 * np.eye(len(logs)))


@functools.cache
def _power(power, dimension):
    exponent = Fraction(power).limit_denominator(100) / dimension
    return "1/N" if exponent == 1 else f"1/N^{exponent}" if exponent.denominator == 1 else f"1/N^({exponent})"


def forms_for(sizes, boundary=None, dimension=None) -> tuple[Form, ...]:
    """The forms to compare for these numbers of sites; boundary "open", "periodic" or None for unknown or mixed,
    dimension 1, 2, 3 or None (all are tried)."""
    chosen, sizes = [], np.asarray(sizes, float)
    parities = len(set((sizes % 2).tolist())) > 1
    for (edge, d), power in LEADING.items():
        if boundary in (None, edge) and (d == dimension or dimension is None):
            mixed = parities if d == 1 else not similar_shapes(sizes, d)
            chosen += _forms(edge, d, power, sizes ** (1 / d), mixed)
    return tuple(chosen)


def similar_shapes(sizes, dimension):
    """Whether clusters of these numbers of sites can have one shape in d > 1: N = c L^d with whole L and one c."""
    return len({_without_powers(int(n), dimension) for n in np.asarray(sizes).tolist()}) == 1


def _without_powers(number, power):
    k = 2
    while k**power <= number:
        while number % k**power == 0:
            number //= k**power
        k += 1
    return number


def _forms(edge, d, power, x, mixed):
    """mixed: even and odd chains, or clusters of different shape, need not follow one smooth law."""
    smooth = RARE if d > 1 and mixed else 1.0
    extra = 2 if (edge, d) == ("periodic", 1) else 1
    forms = []
    for span in SPANS:
        forms.append(Form(edge, d, "slow", power, span, weight=smooth))
        forms.append(Form(edge, d, "next", power, span, extra, weight=smooth))
        if d == 1:
            forms += [Form(edge, d, "logarithm", power, span, extra, logarithm=scale) for scale in LOGARITHMS]
        if (edge, d) == ("open", 1):
            # the energy of the ends itself varies: nearly free end spins, couplings that flow
            forms.append(Form(edge, d, "growing", 1, span, steady=0.0))
        if (edge, d) == ("periodic", 1):
            # a relevant coupling grows, all sizes are below the correlation length
            forms.append(Form(edge, d, "growing", power, span, -1, weight=RARE))
    if (edge, d) == ("open", 1):
        forms.append(Form(edge, d, "growing", power, SPANS[-1], CROSSOVER, weight=UNCOMMON))
    if d > 1:
        forms.append(Form(edge, d, "irregular", power, SHORT_SPAN, steady=IRREGULAR))
    # sizes of different commensurability differ by as much as the leading term itself; even ones alone rarely do
    forms.append(Form(edge, d, "irregular", power, SHORT_SPAN, weight=1.0 if mixed or d > 1 else RARE))
    for length in np.geomspace(0.15 * np.min(np.diff(np.unique(x))), FAR * (x[-1] - x[0]), LENGTHS):
        forms += [
            Form(edge, d, "exponential", p, span, length=float(length), weight=smooth)
            for p in (1, 2)
            for span in SPANS[1:]
        ]
    return forms
