"""Pauli-Jordan operators on points against the dense formulas, written out below."""

import os
import re
import subprocess
import sys

import numpy as np
import pytest
from scipy import sparse

from lozenge_engine.errors import InputError
from lozenge_engine.kernels.order import (
    ExplicitCommutator,
    MassiveCommutator,
    MasslessCommutator,
    count_relations,
    warm,
)

SIZE = 300
DENSITY = SIZE / 2
LARGEST_MASS = 0.3 * DENSITY**0.5


def points(size=SIZE, seed=5):
    """Points of a diamond in natural order; v as far from u as from itself."""
    rng = np.random.default_rng(seed)
    u, v = rng.uniform(-(0.5**0.5), 0.5**0.5, size=(2, size))
    return np.sort(u), v


def vectors(size=SIZE, columns=None, seed=6):
    shape = (size,) if columns is None else (size, columns)
    return np.random.default_rng(seed).standard_normal(shape)


def whole_vectors(size=SIZE, columns=None, seed=7):
    """Whole numbers: every sum of them is exact in doubles, so that results must be equal."""
    shape = (size,) if columns is None else (size, columns)
    return np.random.default_rng(seed).integers(-9, 10, size=shape).astype(float)


def causal_matrix(u, v):
    """C_ij = 1 iff u_i < u_j and v_i < v_j."""
    return ((u[:, None] < u) & (v[:, None] < v)).astype(float)


def dense_commutator(c, mass=0.0, density=DENSITY):
    """A = G - G^T, G = (C/2) (1 + (m^2/2 rho) C)^-1: the formula of arXiv:0806.3083."""
    g = c / 2 @ np.linalg.inv(np.eye(len(c)) + mass**2 / (2 * density) * c)
    return g - g.T


def relative_error(found, expected):
    return np.abs(found - expected).max() / np.abs(expected).max()


def random_order(size=60, seed=11):
    """Dense relation of points whose labels are in no topological order, and its points."""
    u, v = np.random.default_rng(seed).random((2, size))
    return causal_matrix(u, v), u, v


OPERATORS = {
    "massless": MasslessCommutator,
    "massless compiled": lambda u, v: MasslessCommutator(u, v, compiled=True),
    "massive": lambda u, v: MassiveCommutator(u, v, mass=2.0, density=DENSITY),
    "explicit dense": lambda u, v: ExplicitCommutator(causal_matrix(u, v)),
    "explicit sparse, massive": lambda u, v: ExplicitCommutator(
        sparse.csr_array(causal_matrix(u, v)), mass=2.0, density=DENSITY
    ),
    "explicit dense, massive": lambda u, v: ExplicitCommutator(
        causal_matrix(u, v), mass=2.0, density=DENSITY
    ),
}
every_operator = pytest.mark.parametrize("build", OPERATORS.values(), ids=OPERATORS)
both_routes = pytest.mark.parametrize("compiled", [False, True], ids=["numpy", "compiled"])


# ------------------------------------------------------------------------------- massless


@both_routes
@pytest.mark.parametrize("columns", [None, 1, 5])
def test_massless_operator_equals_the_dense_formula_exactly_on_whole_numbers(compiled, columns):
    u, v = points()
    x = whole_vectors(columns=columns)
    found = MasslessCommutator(u, v, compiled=compiled).apply(x)
    np.testing.assert_array_equal(found, dense_commutator(causal_matrix(u, v)) @ x)


@both_routes
def test_massless_operator_equals_the_dense_formula_to_rounding(compiled):
    u, v = points()
    x = vectors()
    found = MasslessCommutator(u, v, compiled=compiled).apply(x)
    assert relative_error(found, dense_commutator(causal_matrix(u, v)) @ x) < 1e-13


@pytest.mark.parametrize("size", [1, 2, 3, 1000, 20_001])
@pytest.mark.parametrize("columns", [None, 1, 8])
def test_both_massless_routes_give_the_same_bits(size, columns):
    u, v = points(size)
    x = vectors(size, columns)
    plain = MasslessCommutator(u, v).apply(x)
    compiled = MasslessCommutator(u, v, compiled=True).apply(x)
    np.testing.assert_array_equal(plain, compiled)


def test_points_with_two_heights_exchanged_give_another_operator():
    u, v = points()
    x = vectors()
    other = v.copy()
    other[[10, 200]] = v[[200, 10]]
    dense = dense_commutator(causal_matrix(u, v)) @ x
    assert relative_error(MasslessCommutator(u, other).apply(x), dense) > 1e-3


# ------------------------------------------------------------------------------- massive


@pytest.mark.parametrize("mass", [0.0, 0.5, 2.0, LARGEST_MASS])
@pytest.mark.parametrize("columns", [None, 1, 5])
def test_massive_operator_equals_the_dense_inverse(mass, columns):
    u, v = points()
    x = vectors(columns=columns)
    found = MassiveCommutator(u, v, mass=mass, density=DENSITY).apply(x)
    assert relative_error(found, dense_commutator(causal_matrix(u, v), mass) @ x) < 1e-12


def test_mass_changes_the_operator():
    u, v = points()
    x = vectors()
    massless = MasslessCommutator(u, v).apply(x)
    assert relative_error(MassiveCommutator(u, v, mass=1.0, density=DENSITY).apply(x), massless) > (
        1e-3
    )


@pytest.mark.parametrize("size", [1, 2, 3, 257])
def test_massive_operator_without_mass_is_the_massless_one(size):
    u, v = points(size)
    x = whole_vectors(size, 3)
    massive = MassiveCommutator(u, v, mass=0.0, density=DENSITY)
    np.testing.assert_array_equal(massive.apply(x), MasslessCommutator(u, v).apply(x))


@pytest.mark.parametrize("mass", [1e-4, 1e-8, 1e-30])
def test_small_mass_tends_to_massless_without_cancellation(mass):
    # The first order in the coupling is m^2/(2 rho) |C C x| <= m^2/(2 rho) n^2 |x|_max, relative to
    # a result of order sqrt(n): below 3e-7 m^2. (x - y)/coupling would lose eps/coupling.
    u, v = points()
    x = vectors()
    found = MassiveCommutator(u, v, mass=mass, density=DENSITY).apply(x)
    massless = dense_commutator(causal_matrix(u, v)) @ x
    assert relative_error(found, massless) < 1e-13 + 100 * mass**2


def test_retarded_and_advanced_parts_are_transposes_and_add_up():
    u, v = points()
    massive = MassiveCommutator(u, v, mass=2.0, density=DENSITY)
    identity = np.eye(SIZE)
    g = massive.retarded(identity)
    np.testing.assert_allclose(massive.advanced(identity), g.T, rtol=0, atol=1e-14)
    np.testing.assert_array_equal(np.tril(g), 0.0)
    np.testing.assert_array_equal(massive.apply(identity), g - massive.advanced(identity))


# ------------------------------------------------------------------------------ every operator


@every_operator
def test_operator_is_skew(build):
    operator = build(*points())
    x, y = vectors(seed=1), vectors(seed=2)
    scale = np.linalg.norm(x) * np.linalg.norm(operator.apply(y))
    assert abs(x @ operator.apply(y) + y @ operator.apply(x)) < 1e-13 * scale
    assert abs(x @ operator.apply(x)) < 1e-13 * np.linalg.norm(x) * np.linalg.norm(
        operator.apply(x)
    )


@pytest.mark.parametrize("build", list(OPERATORS.values())[:3], ids=list(OPERATORS)[:3])
@pytest.mark.parametrize("layout", ["C", "F", "strided"])
def test_a_panel_has_the_bits_of_its_single_vectors(build, layout):
    operator = build(*points())
    panel = vectors(columns=6)
    x = {"C": panel, "F": np.asfortranarray(panel), "strided": np.repeat(panel, 2, axis=1)[:, ::2]}
    single = [operator.apply(panel[:, c]) for c in range(6)]
    np.testing.assert_array_equal(operator.apply(x[layout]), np.column_stack(single))


@every_operator
def test_a_read_only_input_is_taken_and_left_as_it_is(build):
    operator = build(*points())
    for x in (vectors(), vectors(columns=2)):
        before = x.copy()
        x.flags.writeable = False
        assert operator.apply(x).shape == x.shape
        np.testing.assert_array_equal(x, before)


@every_operator
@pytest.mark.parametrize(
    "x",
    [
        np.zeros(SIZE + 1),
        np.zeros((SIZE, 2, 1)),
        np.zeros(SIZE, dtype=complex),
        np.zeros(SIZE, dtype=np.float32),
        [0.0] * SIZE,
    ],
    ids=["length", "dimensions", "complex", "float32", "list"],
)
def test_what_is_no_vector_and_no_panel_is_refused(build, x):
    with pytest.raises(
        InputError, match=r"x: given .*; allowed is a float64 array of shape \(300,\)"
    ):
        build(*points()).apply(x)


@every_operator
def test_size_is_the_number_of_elements(build):
    assert build(*points()).size == SIZE


@every_operator
def test_squared_norm_is_the_sum_of_all_squared_entries_or_not_given(build):
    operator = build(*points())
    norm = operator.squared_norm()
    exact = (operator.apply(np.eye(SIZE)) ** 2).sum()
    massless = abs(exact - (dense_commutator(causal_matrix(*points())) ** 2).sum()) < 1
    assert norm == exact if massless else norm is None


# ------------------------------------------------------------------------------ explicit order


@pytest.mark.parametrize("mass", [0.0, 2.0])
@pytest.mark.parametrize(
    "form",
    [np.asarray, lambda c: c.astype(bool), sparse.coo_array, sparse.csc_matrix, np.ndarray.tolist],
    ids=["float", "bool", "coo_array", "csc_matrix", "list"],
)
def test_explicit_order_of_points_is_their_operator(mass, form):
    u, v = points()
    x = vectors(columns=3)
    explicit = ExplicitCommutator(form(causal_matrix(u, v)), mass=mass, density=DENSITY)
    on_points = MassiveCommutator(u, v, mass=mass, density=DENSITY).apply(x)
    assert relative_error(explicit.apply(x), on_points) < 1e-12


@pytest.mark.parametrize("mass", [0.0, 2.0])
@pytest.mark.parametrize("form", [np.asarray, sparse.csr_array], ids=["dense", "sparse"])
def test_explicit_order_takes_and_returns_the_callers_order(mass, form):
    c, _, _ = random_order()
    x = vectors(len(c))
    found = ExplicitCommutator(form(c), mass=mass, density=DENSITY).apply(x)
    assert relative_error(found, dense_commutator(c, mass) @ x) < 1e-12


@pytest.mark.parametrize("form", [np.asarray, sparse.csr_array], ids=["dense", "sparse"])
def test_relabelling_the_elements_relabels_the_result(form):
    c, _, _ = random_order()
    x = vectors(len(c))
    labels = np.random.default_rng(3).permutation(len(c))
    plain = ExplicitCommutator(form(c), mass=1.0, density=DENSITY).apply(x)
    relabelled = ExplicitCommutator(form(c[labels][:, labels]), mass=1.0, density=DENSITY)
    np.testing.assert_allclose(relabelled.apply(x[labels]), plain[labels], rtol=0, atol=1e-13)


def test_an_order_that_no_points_of_the_plane_have_is_taken():
    # Three minimal, three maximal elements, each below two of them: dimension three.
    c = np.zeros((6, 6))
    c[:3, 3:] = 1 - np.eye(3)
    assert ExplicitCommutator(c).squared_norm() == 3.0
    np.testing.assert_array_equal(ExplicitCommutator(c).apply(np.eye(6)), (c - c.T) / 2)


def test_explicit_input_is_left_as_it_is():
    # 0 < 1 < 2, a stored zero, and one row whose entries stand out of order.
    c = sparse.csr_array(([1, 1, 1, 0], [2, 1, 2, 0], [0, 2, 3, 4]), shape=(3, 3))
    before = c.copy()
    ExplicitCommutator(c)
    for part in ("data", "indices", "indptr"):
        np.testing.assert_array_equal(getattr(c, part), getattr(before, part))


def relation(size, *pairs):
    c = np.zeros((size, size), dtype=int)
    c[tuple(np.transpose(pairs))] = 1
    return c


CHAIN_OF_SIX = [(i, j) for i in range(6) for j in range(i + 1, 6)]
VIOLATIONS = {
    "not square": (np.zeros((2, 3)), r"relations: given shape \(2, 3\); allowed is a square array"),
    "empty": (np.zeros((0, 0)), r"relations: given shape \(0, 0\)"),
    "not 0 or 1": (
        np.array([[0, 1, 0], [0, 0, 2], [0, 0, 3]]),
        r"relations: given entry \(1, 2\) = 2; allowed is 0 or 1",
    ),
    "NaN": (np.array([[0, np.nan], [0, 0]]), r"given entry \(0, 1\) = nan"),
    "complex": (np.zeros((2, 2), dtype=complex), r"given entries of type complex128"),
    "reflexive": (relation(3, (0, 1), (2, 2)), r"given 2 precedes itself; allowed is a strict"),
    "both ways": (relation(3, (0, 1), (1, 2), (2, 1)), r"given 1 precedes 2 and 2 precedes 1"),
    "cycle": (
        relation(5, (0, 1), (1, 2), (2, 4), (4, 3), (3, 1), (0, 2)),
        r"given 1 precedes 2 precedes 4 precedes 3 precedes 1; allowed",
    ),
    "not transitive": (
        relation(6, *[pair for pair in CHAIN_OF_SIX if pair != (1, 4)]),
        r"given 1 precedes 2 and 2 precedes 4, but 1 does not precede 4; allowed",
    ),
}


@pytest.mark.parametrize(("given", "message"), VIOLATIONS.values(), ids=VIOLATIONS)
@pytest.mark.parametrize("form", [np.asarray, sparse.csr_array], ids=["dense", "sparse"])
def test_what_is_no_strict_order_is_refused_naming_the_violation(given, message, form):
    with pytest.raises(InputError, match=message):
        ExplicitCommutator(form(given))


def test_entries_given_twice_in_a_sparse_relation_are_refused():
    twice = sparse.coo_array(([1, 1], ([0, 0], [1, 1])), shape=(2, 2))
    with pytest.raises(InputError, match=r"given entry \(0, 1\) = 2"):
        ExplicitCommutator(twice)


def test_a_violation_is_found_beyond_the_first_rows():
    size = 1100
    c = np.triu(np.ones((size, size)), 1)
    c[1050, 1090] = 0
    with pytest.raises(InputError, match=r"1050 precedes 1051 and 1051 precedes 1090, but 1050"):
        ExplicitCommutator(c)


# ------------------------------------------------------------------------------ refused input

POINTS_REFUSED = {
    "u not ascending": ([0.0, 2.0, 1.0], [0.0, 1.0, 2.0], r"u: given u\[2\] = 1 after u\[1\] = 2"),
    "u twice": ([0.0, 1.0, 1.0], [0.0, 1.0, 2.0], r"u: given u\[1\] = u\[2\] = 1; allowed is each"),
    "v twice": ([0.0, 1.0, 2.0], [0.5, 1.0, 0.5], r"v: given v\[0\] = v\[2\] = 0.5; allowed"),
    "NaN": ([0.0, 1.0, 2.0], [0.0, np.nan, 2.0], r"v\[1\]: given nan; allowed is a finite"),
    "infinite": ([0.0, 1.0, np.inf], [0.0, 1.0, 2.0], r"u\[2\]: given inf; allowed is a finite"),
    "lengths": ([0.0, 1.0], [0.0], r"points: given u of shape \(2,\) and v of shape \(1,\)"),
    "none": ([], [], r"points: given u of shape \(0,\)"),
}


@pytest.mark.parametrize(("u", "v", "message"), POINTS_REFUSED.values(), ids=POINTS_REFUSED)
@pytest.mark.parametrize(
    "build",
    [
        MasslessCommutator,
        lambda u, v: MassiveCommutator(u, v, mass=0.1, density=1.0),
        count_relations,
    ],
    ids=["massless", "massive", "count"],
)
def test_points_out_of_order_or_standing_twice_are_refused(build, u, v, message):
    with pytest.raises(InputError, match=message):
        build(np.array(u), np.array(v))


@pytest.mark.parametrize(
    "build",
    [
        lambda **keys: MassiveCommutator([0.0, 1.0], [0.0, 1.0], **keys),
        lambda **keys: ExplicitCommutator([[0, 1], [0, 0]], **keys),
    ],
    ids=["points", "explicit"],
)
@pytest.mark.parametrize(
    ("mass", "density", "message"),
    [
        (-0.1, 100.0, r"mass: given -0.1; allowed is 0 to 0.3 sqrt\(density\) = 3 inverse half"),
        (3.001, 100.0, r"mass: given 3.001; .*; lower the mass or raise the density\."),
        (np.nan, 100.0, r"mass: given nan"),
        (1.0, 0.0, r"density: given 0.0; allowed is a finite number above 0"),
        (1.0, np.inf, r"density: given inf"),
        (1.0, None, r"density: given None; .*; pass the density of the points\."),
    ],
)
def test_mass_or_density_out_of_range_is_refused(build, mass, density, message):
    with pytest.raises(InputError, match=message):
        build(mass=mass, density=density)


# --------------------------------------------------------------------------- counting relations


@pytest.mark.parametrize("size", [1, 2, 3, 4, 5, 31, 32, 33, 300])
def test_count_of_relations_equals_brute_force(size):
    for seed in range(5):
        u, v = points(size, seed)
        assert count_relations(u, v) == causal_matrix(u, v).sum()


def test_count_of_relations_of_a_chain_and_of_an_antichain():
    u = np.arange(1000.0)
    assert count_relations(u, u) == 1000 * 999 // 2
    assert count_relations(u, -u) == 0


# ------------------------------------------------------------------------------ compiled loops


def test_warm_compiles_every_loop_once():
    from lozenge_engine.kernels import fenwick

    warm()
    for name in fenwick.__all__:
        loop = getattr(fenwick, name)
        assert loop() is loop()
        assert len(loop().signatures) == 1
        assert loop.cache_info().misses == 1


def python(code, **environment):
    return subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path), **environment},
        capture_output=True,
        text=True,
        check=False,
    )


def test_importing_the_operators_does_not_import_numba():
    run = python(
        "import sys, lozenge_engine.kernels.order as order\n"
        "order.MasslessCommutator([0., 1.], [0., 1.]).apply(order.np.zeros(2))\n"
        "sys.exit('numba' in sys.modules)"
    )
    assert run.returncode == 0, run.stderr


def test_loops_compile_where_no_cache_folder_can_be_written():
    run = python(
        "import numpy as np\n"
        "from lozenge_engine.kernels import fenwick, order\n"
        "print(order.MasslessCommutator([0., 1.], [0., 1.], compiled=True).apply(np.ones(2)))\n"
        "print(type(fenwick.massless_loop()._cache).__name__)",
        NUMBA_CACHE_DIR=os.path.join(os.devnull, "nowhere"),
        NUMBA_CACHE_LOCATOR_CLASSES="_UserProvidedCacheLocator",
    )
    assert re.fullmatch(r"\[ 0\.5 -0\.5\]\nNullCache\n", run.stdout), run.stderr
