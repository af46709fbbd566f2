import math
import pickle

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.spatial import ConvexHull, QhullError
from scipy.spatial.transform import Rotation

from envflux.coatings import Coating, Spread
from envflux.craft import Craft, Face, box_craft
from envflux.errors import InputError
from envflux.vectors import AXES

WHITE = Coating(0.2, 0.9)
BLACK = Coating(0.95, 0.88)

# A unit vector made of three rounded divisions and a square root.
ROUNDING = 4 * np.finfo(float).eps

components = st.floats(-1e3, 1e3, allow_nan=False)
directions = st.tuples(components, components, components).filter(lambda v: max(map(abs, v)) > 1e-3)


def test_box_has_six_faces_with_the_right_areas() -> None:
    box = box_craft((0.7, 1.1, 2.3), WHITE)
    assert [surface.name for surface in box.surfaces()] == list(AXES)
    expected = {"X": 1.1 * 2.3, "Y": 0.7 * 2.3, "Z": 0.7 * 1.1}
    for surface in box.surfaces():
        assert surface.area_m2 == expected[surface.name[1]]
        assert surface.normal == AXES[surface.name]
        assert surface.coating == WHITE
    assert box.closed


def test_box_faces_can_be_renamed_and_coated() -> None:
    box = box_craft(
        [1.0, 1.0, 1.0],
        "C048",
        coatings={"+Z": BLACK, "radiator": WHITE},
        names={"+Z": "nadir panel", "-Y": "radiator"},
    )
    by_name = {surface.name: surface for surface in box.surfaces()}
    assert list(by_name) == ["+X", "-X", "+Y", "radiator", "nadir panel", "-Z"]
    assert by_name["nadir panel"].coating == BLACK
    assert by_name["radiator"].coating == WHITE
    assert by_name["radiator"].normal == (0.0, -1.0, 0.0)
    # NASA RP-1121: titanium dioxide white paint in potassium silicate.
    assert by_name["+X"].coating.values() == (0.17, 0.92)
    assert "NASA RP-1121" in by_name["+X"].coating.source


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"size_m": (1, 2)}, "size_m is (1, 2), but it must be three lengths in metres, each above 0"),
        ({"size_m": (1, 2, 0)}, "size_m is (1, 2, 0), but it must be three lengths in metres, each above 0"),
        ({"size_m": (1, 2, math.inf)}, "size_m is (1, 2, inf), but it must be three lengths in metres, each above 0"),
        ({"size_m": 3}, "size_m is 3, but it must be three lengths in metres, each above 0"),
        ({"size_m": "big"}, "size_m is 'big', but it must be three lengths in metres, each above 0"),
        ({"names": {"+W": "ram"}}, "names is '+W', but it must be one of +X, -X, +Y, -Y, +Z, -Z"),
        ({"names": {"+X": "-X"}}, "names.+X is '-X', but it must be a name that is not that of another axis"),
        (
            {"names": {"+X": "ram", "-X": "ram"}},
            "faces.2.name is 'ram', but it must be a name that no other face bears; "
            "a face with a back also takes 'NAME back'",
        ),
        (
            {"names": {"+X": "ram"}, "coatings": {"rm": BLACK}},
            "coatings is 'rm', but it must be one of +X, -X, +Y, -Y, +Z, -Z, ram (did you mean 'ram'?)",
        ),
        (
            {"names": {"+X": "ram"}, "coatings": {"ram": BLACK, "+X": WHITE}},
            "coatings is '+X', but it must be given once; the face +X has a coating already",
        ),
        (
            {"coating": 0.3},
            "coating is 0.3, but it must be a Coating, or the identifier of a catalogue entry such as 'C048'",
        ),
        ({"coating": "C999"}, "coating is 'C999', but it must be a catalogue entry, C001 to C222"),
    ],
)
def test_bad_boxes_are_one_sentence(arguments: dict[str, object], message: str) -> None:
    with pytest.raises(InputError) as caught:
        box_craft(**{"size_m": (1.0, 1.0, 1.0), "coating": WHITE, **arguments})
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("fields", "message"),
    [
        (
            {"normal": "+x"},
            "normal is '+x', but it must be one of +X, -X, +Y, -Y, +Z, -Z, or three numbers (did you mean '+X'?)",
        ),
        *(
            (
                {"normal": normal},
                f"normal is {normal}, but it must be three finite numbers that are not all zero, "
                "or one of +X, -X, +Y, -Y, +Z, -Z",
            )
            for normal in ([0, 0, 0], [0.0, -0.0, 0.0], [1, 2], [1, 2, 3, 4], [1, 2, math.nan], [1, 2, math.inf], 5)
        ),
        ({"area_m2": 0.0}, "area_m2 is 0.0, but it must be above 0"),
        ({"area_m2": -2}, "area_m2 is -2, but it must be above 0"),
        ({"area_m2": math.inf}, "area_m2 is inf, but it must be a finite number"),
        ({"area_m2": "2"}, "area_m2 is '2', but it must be a number"),
        ({"name": "  "}, "name is ' ', but it must be a text on one line, without spaces at its ends"),
        ({"name": "a\nb"}, "name is 'a\\nb', but it must be a text on one line, without spaces at its ends"),
        ({"back": 0.2}, "back is 0.2, but it must be a Coating, or the identifier of a catalogue entry such as 'C048'"),
        ({"back": "C25"}, "back is 'C25', but it must be a catalogue entry, C001 to C222 (did you mean 'C025'?)"),
    ],
)
def test_bad_faces_are_one_sentence_that_says_which(fields: dict[str, object], message: str) -> None:
    table = {
        "name": "panel",
        "normal": "+Z",
        "area_m2": 1.0,
        "coating": {"absorptance": 0.2, "emittance": 0.9},
        **fields,
    }
    with pytest.raises(InputError) as caught:
        Face(**table)
    assert str(caught.value) == message
    good = {**table, "name": "other", "normal": "+X", "area_m2": 1.0, "back": None}
    with pytest.raises(InputError) as caught:
        Craft.from_table({"faces": [good, table]})
    assert str(caught.value) == f"faces.2.{message}"


def test_bad_coating_inside_a_craft_is_found_by_its_path() -> None:
    face = {"name": "panel", "normal": [0, 0, 1], "area_m2": 1}
    with pytest.raises(InputError, match=r"^faces\.1\.coating\.absorptance is 2, but it must be a number from 0 to 1"):
        Craft.from_table({"faces": [{**face, "coating": {"absorptance": 2, "emittance": 0.3}}]})
    with pytest.raises(InputError, match=r"^faces\.1\.bck is 'C001', .* \(did you mean 'back'\?\)$"):
        Craft.from_table({"faces": [{**face, "coating": "C048", "bck": "C001"}]})


def test_craft_needs_a_face_and_unique_names() -> None:
    with pytest.raises(InputError, match=r"^faces is \[\], but it must be a list of at least 1$"):
        Craft([])
    panel = Face("panel", "+X", 1.0, WHITE, back=BLACK)
    for twin in (Face("panel", "+Y", 1.0, WHITE), Face("panel back", "+Y", 1.0, WHITE)):
        with pytest.raises(InputError, match=rf"^faces\.2\.name is '{twin.name}', but it must be a name that no other"):
            Craft([panel, twin])


def test_two_sided_face_gives_two_opposite_surfaces() -> None:
    panel = Face("array", (0.0, 3.0, -4.0), 2.5, WHITE, back=BLACK)
    front, back = Craft([panel]).surfaces()
    assert (front.name, back.name) == ("array", "array back")
    assert front.normal == (0.0, 0.6, -0.8)
    assert back.normal == (0.0, -0.6, 0.8)
    assert (front.coating, back.coating) == (WHITE, BLACK)
    assert front.area_m2 == back.area_m2 == 2.5
    assert panel.normal == (0.0, 3.0, -4.0)  # kept as it was given
    assert Face("lid", "-Y", 1.0, WHITE).normal == "-Y"


@given(directions, st.floats(-300, 300))
def test_normals_have_unit_length_and_their_direction(vector: tuple[float, float, float], power: float) -> None:
    scaled = tuple(component * 10.0**power for component in vector)
    assume(all(abs(component) > 1e-290 or component == 0.0 for component in scaled))
    assume(all(map(math.isfinite, scaled)))
    found = Face("a", scaled, 1.0, WHITE).unit_normal
    assert math.hypot(*found) == pytest.approx(1.0, abs=ROUNDING)
    np.testing.assert_allclose(found, np.array(vector) / math.hypot(*vector), rtol=0, atol=4 * ROUNDING)


def test_normals_may_come_as_arrays() -> None:
    assert Face("a", np.array([0.0, 0.0, 2.0]), 1.0, WHITE).unit_normal == (0.0, 0.0, 1.0)
    assert Face("a", [0, 0, 2], 1, WHITE) == Face("a", (0.0, 0.0, 2.0), 1.0, WHITE)


def test_craft_survives_json_sets_and_processes() -> None:
    craft = Craft(
        [Face("a", (1.0, 2.0, 3.0), 1.5, Coating(Spread(0.1, 0.2, 0.3), 0.9), back=BLACK), Face("b", "-X", 0.1, WHITE)],
        name="two faces",
    )
    assert Craft.from_json(craft.to_json()) == craft
    assert pickle.loads(pickle.dumps(craft)) == craft
    assert len({craft, Craft.from_json(craft.to_json())}) == 1


def polyhedron(points: np.ndarray) -> tuple[Craft, ConvexHull]:
    hull = ConvexHull(points)
    corners = points[hull.simplices]
    areas = 0.5 * np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=-1)
    faces = [
        Face(f"t{place}", normal, area, WHITE)
        for place, (normal, area) in enumerate(zip(hull.equations[:, :3], areas.tolist(), strict=True))
    ]
    return Craft(faces), hull


@given(st.integers(0, 2**32 - 1), st.integers(4, 20))
def test_projected_area_is_the_shadow_of_a_convex_body(seed: int, count: int) -> None:
    # General reference: the convex hull of the corners flattened along the direction (scipy, Qhull).
    rng = np.random.default_rng(seed)
    points = rng.normal(size=(count, 3)) * [1.0, 1.7, 0.6]
    try:
        craft, _ = polyhedron(points)
    except QhullError:  # the points were flat
        assume(False)
    toward = rng.normal(size=3)
    flat = points @ Rotation.align_vectors([[0.0, 0.0, 1.0]], [toward])[0].as_matrix().T
    # Qhull's plane normals are good to about 1e-13 of the size.
    assert craft.projected_area_m2(toward) == pytest.approx(ConvexHull(flat[:, :2]).volume, rel=1e-9)
    assert craft.closed


def test_mean_shadow_of_a_convex_body_is_a_quarter_of_its_surface() -> None:
    # Cauchy's theorem. 400 000 random directions leave a standard error of 2.1e-4, three of which are allowed: the
    # shadow of this body varies by 13 % of its mean.
    rng = np.random.default_rng(7)
    craft, hull = polyhedron(rng.normal(size=(30, 3)))
    mean = craft.projected_area_m2(rng.normal(size=(400_000, 3))).mean()
    assert mean == pytest.approx(hull.area / 4.0, rel=6e-4)


@pytest.mark.parametrize(
    ("toward", "ratio"),
    # Absorbing over radiating area of a cube: 1/6 face-on, sqrt(2)/6 edge-on, sqrt(3)/6 corner-on.
    [((1, 0, 0), 0.16666667), ((0, -1, 1), 0.23570226), ((5, 5, -5), 0.28867513)],
)
def test_projected_area_of_a_cube(toward: tuple[int, int, int], ratio: float) -> None:
    cube = box_craft((2.0, 2.0, 2.0), WHITE)
    assert cube.projected_area_m2(toward) / 24.0 == pytest.approx(ratio, abs=5e-9)  # printed to 1e-8


def test_projected_area_broadcasts() -> None:
    box = box_craft((1.0, 2.0, 3.0), WHITE)
    found = box.projected_area_m2([[[1, 0, 0], [0, -9, 0]], [[0, 0, 1], [np.nan, 0, 1]]])
    np.testing.assert_array_equal(found, [[6.0, 3.0], [2.0, np.nan]])
    assert box.projected_area_m2(np.empty((0, 3))).shape == (0,)
    with pytest.raises(
        InputError, match=r"^direction is \(0, 0, 0\), but it must be three numbers that are not all zero$"
    ):
        box.projected_area_m2((0, 0, 0))


def test_closed_tells_an_open_craft() -> None:
    box = box_craft((1.0, 2.0, 3.0), WHITE)
    assert not Craft(box.faces[:5]).closed
    assert not Craft([*box.faces[:5], Face("-Z", "-Z", 2.0 * (1 + 1e-6), WHITE)]).closed
    assert Craft([Face("plate", (1.0, 1.0, 0.3), 1.0, WHITE, back=WHITE)]).closed
    assert not Craft([Face("plate", (1.0, 1.0, 0.3), 1.0, WHITE)]).closed


def test_craft_shows_its_surfaces_in_a_notebook() -> None:
    page = Craft([Face("a<b", "+X", 1.0, WHITE, back=BLACK)], name="probe")._repr_html_()
    assert page.startswith("<b>probe</b><table>")
    assert page.count("<tr>") == 3
    assert "a&lt;b back" in page
