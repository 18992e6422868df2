"""Result sets read without truefall: h5dump, xarray, netCDF, Octave, a C and a Fortran program."""

from __future__ import annotations

import subprocess
import warnings

import numpy as np
import pytest
import xarray

from truefall.validate.cases import case
from truefall.validate.formats import read_trajectories
from truefall.validate.make import make

NAME = "bound-inclined-isotropic"


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """A certified set and what truefall itself reads in it."""
    path = tmp_path_factory.mktemp("readers") / "set.h5"
    make(case(NAME).spec, path, certified=True, reproducible=True)
    return path, read_trajectories(path)[0]


def test_h5dump_shows_attributes_and_numbers(made, require_tool):
    """The command line tool of the HDF5 library, also an older one than the writer's."""
    path, trajectory = made
    tool = require_tool("h5dump")

    def dump(*words):
        done = subprocess.run([tool, *words, str(path)], capture_output=True, text=True, check=True)
        return done.stdout

    assert '"isotropic' in dump("-a", f"/trajectory/{NAME}/chart")
    shown = dump(
        "-d", f"/trajectory/{NAME}/position", "-m", "%.17g", "-y", "-s", "3,0", "-c", "1,3"
    )
    numbers = [float(t) for t in shown.split("DATA {")[1].split("}")[0].replace(",", " ").split()]
    assert numbers == trajectory.position[3].tolist()


def test_xarray_reads_dimensions_units_and_values(made):
    """With h5netcdf: time and component are dimensions, nothing warns, every bit is there."""
    path, trajectory = made
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with xarray.open_dataset(path, group=f"/trajectory/{NAME}", engine="h5netcdf") as data:
            assert data["position"].dims == ("time", "component")
            assert data["position"].attrs["units"] == "1"
            assert data.attrs["particle"] == "massive"
            assert np.array_equal(data["time"].values, trajectory.time)
            assert np.array_equal(data["velocity"].values, trajectory.velocity)
            low = trajectory.stored.arrays["proper_time_low"]
            assert np.array_equal(data["proper_time_low"].values, low)


def test_the_netcdf_library_reads_dimensions_units_and_strings(made):
    """Through netCDF4: named dimensions shared by all variables, attributes as plain strings."""
    path, trajectory = made
    # the module warns of its own build when it is imported
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        netcdf = pytest.importorskip("netCDF4")
    with netcdf.Dataset(path) as data:
        group = data[f"trajectory/{NAME}"]
        assert group["velocity"].dimensions == ("time", "component")
        assert group["azimuth"].units == "rad"
        assert group.chart == "isotropic"
        assert np.array_equal(group["position"][...].data, trajectory.position)
        bound = trajectory.stored.arrays["velocity_bound"]
        assert np.array_equal(group["velocity_bound"][...].data, bound)


OCTAVE = """
set = load("-hdf5", argv(){1});
names = fieldnames(set.trajectory);
group = set.trajectory.(names{1});
printf("%d %.17g %.17g %.17g\\n", columns(group.position), group.position(:, 4));
"""


def test_octave_reads_numbers_as_they_are(made, require_tool, tmp_path):
    """Groups become structures, arrays arrive with reversed dimensions."""
    path, trajectory = made
    script = tmp_path / "show.m"
    script.write_text(OCTAVE)
    done = subprocess.run(
        [require_tool("octave-cli"), "--norc", "--no-history", script, path],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    rows, *numbers = done.stdout.split()

    assert int(rows) == len(trajectory)
    assert [float(n) for n in numbers] == trajectory.position[3].tolist()


C_SOURCE = r"""
#include <hdf5.h>
#include <hdf5_hl.h>
#include <stdio.h>
#include <stdlib.h>

int main(int count, char **words) {
    if (count != 3) return 2;
    char path[256], chart[64];
    hid_t file = H5Fopen(words[1], H5F_ACC_RDONLY, H5P_DEFAULT);
    hsize_t size[2];
    snprintf(path, sizeof path, "/trajectory/%s", words[2]);
    if (H5LTget_attribute_string(file, path, "chart", chart) < 0) return 3;
    snprintf(path, sizeof path, "/trajectory/%s/position", words[2]);
    if (H5LTget_dataset_info(file, path, size, NULL, NULL) < 0) return 4;
    double *x = malloc(size[0]*size[1]*sizeof *x);
    if (H5LTread_dataset_double(file, path, x) < 0) return 5;
    printf("%s %d", chart, (int)size[0]);
    for (int k = 0; k < 3; k++) printf(" %.17g", x[3*(size[0] - 1) + k]);
    printf("\n");
    return 0;
}
"""

FORTRAN_SOURCE = """
program show
  use hdf5
  use h5lt
  implicit none
  character(len=256) :: path, name
  integer(hid_t) :: file
  integer(hsize_t) :: dims(2)
  integer(size_t) :: bytes
  integer :: status, kind
  double precision, allocatable :: x(:, :)
  call get_command_argument(1, path)
  call get_command_argument(2, name)
  call h5open_f(status)
  call h5fopen_f(trim(path), H5F_ACC_RDONLY_F, file, status)
  call h5ltget_dataset_info_f(file, '/trajectory/' // trim(name) // '/velocity', dims, kind, &
                              bytes, status)
  if (status /= 0) stop 4
  allocate (x(dims(1), dims(2)))
  call h5ltread_dataset_double_f(file, '/trajectory/' // trim(name) // '/velocity', x, dims, status)
  if (status /= 0) stop 5
  write (*, '(i0, 3(1x, es25.17e3))') dims(2), x(:, dims(2))
end program show
"""


def compiled(compiler, source, path, *words):
    """The output of a program compiled on the spot."""
    path.write_text(source, encoding="utf-8")
    program = path.with_suffix("")
    subprocess.run(
        [compiler, *words, "-o", str(program), str(path)], check=True, capture_output=True,
        cwd=path.parent,
    )  # fmt: skip
    return program


def test_a_c_program_reads_strings_and_numbers(made, require_tool, tmp_path):
    """The system's HDF5 with its high-level calls: fixed strings with a NUL arrive whole."""
    path, trajectory = made
    program = compiled(require_tool("h5cc"), C_SOURCE, tmp_path / "show.c", "-lhdf5_hl")
    done = subprocess.run([program, path, NAME], capture_output=True, text=True, check=True)
    chart, rows, *numbers = done.stdout.split()

    assert (chart, int(rows)) == ("isotropic", len(trajectory))
    assert [float(n) for n in numbers] == trajectory.position[-1].tolist()


def test_a_fortran_program_reads_the_same(made, require_tool, tmp_path):
    """Dimensions come reversed, as the language has them."""
    path, trajectory = made
    compiler = require_tool("h5fc")
    program = compiled(compiler, FORTRAN_SOURCE, tmp_path / "show.f90", "-lhdf5hl_fortran")
    done = subprocess.run([program, path, NAME], capture_output=True, text=True, check=True)
    rows, *numbers = done.stdout.split()

    assert int(rows) == len(trajectory)
    assert [float(n) for n in numbers] == trajectory.velocity[-1].tolist()
