"""The state of a sweep: site tensors, bonds and environments of a chain, seen from the end where the sweep started.

Every sweep runs from site 0 to the right; `mirror` then turns the chain round. Left of the centre all tensors are
orthonormal towards the right, right of it towards the left, and both environments of the centre are up to date.
"""

from dataclasses import dataclass, field

import numpy as np

from manybody.quantum import blocks, contraction, split
from manybody.quantum.compiled import Scratch, shared_scratch
from manybody.quantum.matrix_product_operator import OperatorSite, composite


@dataclass(slots=True)
class Bond:
    """charges (n,) distinct integers and dims (n,) states of each; not to be changed in place."""

    charges: np.ndarray
    dims: np.ndarray
    image: tuple[int, "Bond"] | None = field(default=None, init=False, repr=False, compare=False)

    @property
    def dimension(self) -> int:
        return int(self.dims.sum())

    @property
    def pair(self) -> tuple[np.ndarray, np.ndarray]:
        return self.charges, self.dims

    def mirrored(self, total: int) -> "Bond":
        """The bond as seen from the other end of a chain of this total charge."""
        if self.image is None or self.image[0] != total:
            other = Bond(total - self.charges, self.dims)
            self.image, other.image = (total, other), (total, self)
        return self.image[1]


@dataclass
class Chain:
    """Sites in the order of the present view.

    local: charges of the local states; operators; bonds (length + 1); tensors, site tensors by left; turned: whether a
    tensor is still stored as seen from the other end; left[l], right[l]: environments by bra of bond l; total: charge
    of the whole chain; reverse: the view is from the far end.
    """

    local: list[np.ndarray]
    operators: list[OperatorSite]
    bonds: list[Bond]
    tensors: list[np.ndarray]
    total: int
    turned: list[bool] = field(default_factory=list)
    left: list[np.ndarray | None] = field(default_factory=list)
    right: list[np.ndarray | None] = field(default_factory=list)
    reverse: bool = False
    other_operators: list[OperatorSite] = field(default_factory=list)
    composites: dict[tuple[int, int], OperatorSite] = field(default_factory=dict)
    scratch: Scratch | None = None

    def __post_init__(self) -> None:
        length = len(self.local)
        self.turned = self.turned or [False] * length
        self.scratch = self.scratch or shared_scratch(self.dtype)
        if not self.other_operators:
            known = {id(site): site.mirrored() for site in self.operators}
            self.other_operators = [known[id(site)] for site in reversed(self.operators)]
        edge = np.zeros(1, self.dtype)
        self.left = self.left or [edge, *[None] * length]
        self.right = self.right or [*[None] * length, edge]

    @property
    def length(self) -> int:
        return len(self.local)

    @property
    def dtype(self) -> np.dtype:
        return self.tensors[0].dtype

    @property
    def bond_dimension(self) -> int:
        return max(bond.dimension for bond in self.bonds)

    def step_bytes(self, pairs: bool) -> int:
        """About the memory of the largest tensor that a step works on."""
        largest = max(tensor.nbytes for tensor in self.tensors)
        return largest * max(local.size for local in self.local) if pairs else largest

    def mirror(self) -> None:
        self.local.reverse()
        self.operators, self.other_operators = self.other_operators, self.operators
        self.bonds = [bond.mirrored(self.total) for bond in reversed(self.bonds)]
        self.tensors.reverse()
        self.turned = [not turned for turned in reversed(self.turned)]
        self.left, self.right = self.right[::-1], self.left[::-1]
        self.reverse = not self.reverse

    def tensor(self, site: int) -> np.ndarray:
        """Site tensor by left in the present view."""
        if self.turned[site]:
            right, left = (self.bonds[k].mirrored(self.total).pair for k in (site, site + 1))
            self.tensors[site] = blocks.mirror_tensor(self.tensors[site], *left, *right, self.local[site], self.total)
            self.turned[site] = False
        return self.tensors[site]

    def turned_tensor(self, site: int) -> np.ndarray:
        """Site tensor by left as seen from the other end."""
        if not self.turned[site]:
            left, right = self.bonds[site].pair, self.bonds[site + 1].pair
            self.tensors[site] = blocks.mirror_tensor(self.tensors[site], *left, *right, self.local[site], self.total)
            self.turned[site] = True
        return self.tensors[site]

    def put(self, site: int, tensor: np.ndarray) -> None:
        self.tensors[site] = tensor
        self.turned[site] = False

    def pair_operator(self, site: int) -> OperatorSite:
        first, second = self.operators[site], self.operators[site + 1]
        key = (id(first), id(second))
        if key not in self.composites:
            self.composites[key] = composite(first, second, (self.local[site].size, self.local[site + 1].size))
        return self.composites[key]

    def arrays(self, operator: OperatorSite) -> tuple:
        """An operator as compiled functions take it, weights in the number type of the tensors."""
        return operator.arrays(self.dtype)

    def advance(self, site: int) -> None:
        """Left environment of the next bond from the one of this bond and the (orthonormal) tensor of the site; the
        right one there is out of date from now on."""
        self.right[site + 1] = None
        self.left[site + 1], needed = contraction.environment(
            self.tensor(site), self.left[site], self.bonds[site].pair, self.bonds[site + 1].pair, self.local[site],
            self.arrays(self.operators[site]), self.scratch.array,
        )  # fmt: skip
        self.scratch.enlarge(needed)

    def renewed(self, site: int, outcome: tuple) -> tuple[float, float]:
        """Take over what a step has made of two sites (outcome of two_site.renew, one_site.renew) and move the centre
        to the second; energy and relative weight discarded. Raises FloatingPointError where numbers failed."""
        energy, first, second, charges, dims, discarded, outside, needed = outcome
        if np.isnan(energy):
            raise FloatingPointError(f"the tensors at sites {site} and {site + 1} are zero or have overflowed")
        self.scratch.enlarge(needed)
        self.bonds[site + 1] = Bond(charges, dims)
        self.put(site, first)
        self.put(site + 1, second)
        self.left[site + 1] = outside
        return energy, discarded

    def rest(self) -> None:
        """Give the environments' memory back; `prepare` makes the chain fit for sweeps again."""
        self.left[1:] = [None] * self.length
        self.right[:-1] = [None] * self.length

    def prune(self, bond: int, charges: np.ndarray) -> None:
        """Drop the states of a bond, ahead of the centre, whose charge is not among `charges`: nothing on the left
        reaches them. The right environment of the bond is void afterwards."""
        before, after = self.bonds[bond], self.bonds[bond + 1]
        stay = np.isin(before.charges, charges)
        widths = blocks.by_left(*before.pair, *after.pair, self.local[bond])[2]
        self.put(bond, self.tensor(bond)[np.repeat(stay, before.dims * widths)])
        self.bonds[bond] = Bond(before.charges[stay], before.dims[stay])
        self.right[bond] = None

    def shift(self, site: int) -> None:
        """Orthonormalize a site without any cut and move the centre to the next."""
        left, right = self.bonds[site], self.bonds[site + 1]
        grouped = blocks.gather_right(self.tensor(site), *left.pair, *right.pair, self.local[site])
        _, height = blocks.by_right(*left.pair, right.charges, self.local[site])
        isometry, carry, kept = split.orthonormal(grouped, np.stack((height, right.dims), axis=1))
        self.pass_on(site, isometry, carry, kept)

    def pass_on(self, site: int, isometry: np.ndarray, carry: np.ndarray, kept: np.ndarray) -> None:
        """Put an isometry grouped by right charge in place of a site tensor and multiply the carry into the next
        one."""
        left, right, after = self.bonds[site : site + 3]
        tensor, following, charges, dims = split.pass_on(
            isometry, carry, kept, self.tensor(site + 1), *left.pair, *right.pair, *after.pair,
            *self.local[site : site + 2],
        )  # fmt: skip
        self.bonds[site + 1] = Bond(charges, dims)
        self.put(site, tensor)
        self.put(site + 1, following)

    def cut(self, site: int, limit: int, allowed: float) -> float:
        """Cut the bond after the centre (see split.choose) and move the centre there, normalized; the relative weight
        discarded. Environments stay as they are."""
        left, right = self.bonds[site], self.bonds[site + 1]
        isometry, carry, kept, discarded = split.cut(
            self.tensor(site), *left.pair, *right.pair, self.local[site], limit, allowed
        )
        self.pass_on(site, isometry, carry, kept)
        return discarded

    def prepare(self, limit: int | None = None, allowed: float = 0.0) -> None:
        """Normalize, centre at site 0, all right environments: from any tensors in the present view. With a limit all
        bonds are cut first (see split.choose)."""
        if limit is not None:
            self.mirror()
            for site in range(self.length - 1):
                self.shift(site)
            self.mirror()
            for site in range(self.length - 1):
                self.cut(site, limit, allowed)
        self.mirror()
        for site in range(self.length - 1):
            self.shift(site)
            self.advance(site)
        self.mirror()
        centre = self.tensor(0)
        self.put(0, centre / np.linalg.norm(centre))
