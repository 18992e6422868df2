"""Result sets inspected: what conforms, what was tampered with, what recomputing finds."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from truefall.validate.cases import case
from truefall.validate.errors import InputError
from truefall.validate.inspection import inspect_set
from truefall.validate.make import make


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    path = tmp_path_factory.mktemp("sets") / "set.h5"
    make(case("bound-inclined-isotropic").spec, path, certified=True, reproducible=True)
    return path


@pytest.mark.parametrize("name", ["plunge-kerr-schild", "light-deflected", "bound-proper-time"])
@pytest.mark.parametrize("certified", [True, False])
def test_what_make_writes_conforms_and_survives_recomputing(tmp_path, name, certified):
    """Every clock and particle, with and without second words."""
    path = tmp_path / "set.h5"
    make(case(name).spec, path, certified=certified)
    found = inspect_set(path, verify=12)

    assert found.faults == []
    assert found.trajectories[0]["verified"] > 0
    assert found.trajectories[0]["certified"] == certified


@settings(max_examples=40)
@given(place=st.floats(0, 1, exclude_max=True), bit=st.integers(0, 7))
def test_any_flipped_bit_is_noticed(made, place, bit):
    """Data, attributes, bounds, structure: reported, never a traceback, never "conforms"."""
    data = bytearray(made.read_bytes())
    data[int(place * len(data))] ^= 1 << bit
    spoiled = made.with_name("spoiled.h5")
    spoiled.write_bytes(bytes(data))
    try:
        found = inspect_set(spoiled)
    except InputError:
        return

    # a bit of padding means nothing: then everything that can be read must be what it was
    assert not found.conforms or everything(spoiled) == everything(made)


def everything(path):
    """All values and attributes of a file, as bytes by path."""
    held = {}

    def visit(name, thing):
        held[name] = thing[()].tobytes() if isinstance(thing, h5py.Dataset) else b""
        for key in thing.attrs:
            if key not in ("DIMENSION_LIST", "REFERENCE_LIST"):
                held[f"{name}@{key}"] = np.asarray(thing.attrs[key]).tobytes()

    with h5py.File(path, "r") as file:
        visit("", file)
        file.visititems(visit)
    return held


def edited(made, tmp_path, edit):
    """A copy changed through the HDF5 library, checksums and all, its digest left as it was."""
    path = tmp_path / "edited.h5"
    path.write_bytes(made.read_bytes())
    with h5py.File(path, "r+") as file:
        (group,) = file["trajectory"].values()
        edit(group)
    return path


@pytest.mark.parametrize(
    "edit",
    [
        lambda g: g["position"].__setitem__((5, 0), np.nextafter(g["position"][5, 0], 99)),
        lambda g: g["position_bound"].__setitem__((7, 1), 0.0),
        lambda g: g.attrs.__setitem__("gm", 1.0 + 2**-52),
        lambda g: g["velocity"].attrs.__setitem__("units", np.bytes_(b"m\0")),
    ],
    ids=["value", "bound", "gm", "units"],
)
def test_changes_through_the_library_are_caught_by_the_digest(made, tmp_path, edit):
    """One unit in the last place is enough."""
    found = inspect_set(edited(made, tmp_path, edit))

    assert not found.conforms


def test_a_wrong_value_under_a_right_digest_is_found_by_recomputing(made, tmp_path):
    """Someone who mends the digest is still caught by the solution."""
    from truefall.validate.formats.hdf5_digest import content_digest

    def shift(group):
        group["position"][:, 0] = group["position"][:, 0] * (1 + 1e-14)
        group["position_low"][:, :] = 0.0
        file = group.file
        file.attrs["content_digest"] = np.bytes_(content_digest(file).encode() + b"\0")

    path = edited(made, tmp_path, shift)
    assert inspect_set(path).conforms

    found = inspect_set(path, verify=15)
    assert not found.conforms
    assert "outside their stored bounds" in found.faults[0]


def test_missing_bounds_and_units_are_named(made, tmp_path):
    """Conformance: each fault in a sentence with the dataset's name."""

    def strip(group):
        del group["velocity_bound"]
        del group["position"].attrs["units"]

    text = "\n".join(inspect_set(edited(made, tmp_path, strip)).faults)

    assert "velocity has no velocity_bound" in text
    assert "position has no units" in text


def test_the_command(made, run):
    """Exit 0 and one JSON document; 1 for a faulty set; 4 for what is none."""
    outcome = run("inspect", made, "--json", "--verify", "3")
    assert outcome.status == 0
    assert json.loads(outcome.out)["conforms"] is True

    truncated = made.with_name("short.h5")
    truncated.write_bytes(made.read_bytes()[:-1000])
    assert run("inspect", truncated).status in (1, 4)
    assert run("inspect", "nothing.h5").status == 4
    assert run("inspect", "table.csv").status == 4
