"""Where compiled kernels are kept: found again, made anew where they are damaged, never anybody else's."""

import json
import math
import os
import subprocess
import sys

import pytest

CALL = """
import json
import math
import numpy as np
{before}
from starkiln.inference import compile
from starkiln.inference.arithmetic import exp_array
result = exp_array(np.array([0.0, 1.0]))
print(json.dumps([str(compile.CACHE_FOLDER), compile.compilations(), result.tolist()]))
"""


def call_kernel(before="", **environment):
    """Call one kernel in a process of its own; return the cache folder and how often it compiled."""
    inherited = {name: text for name, text in os.environ.items() if name not in ("HOME", "XDG_CACHE_HOME")}
    shown = subprocess.run(
        [sys.executable, "-c", "import os\n" + CALL.format(before=before)],
        env=inherited | environment,
        capture_output=True,
        text=True,
        check=True,
    )
    folder, compilations, result = json.loads(shown.stdout)
    assert result == pytest.approx([1.0, math.e], rel=1e-15)
    assert shown.stderr == ""
    return folder, compilations


@pytest.fixture
def cache(tmp_path):
    """A filled cache: environment, and a function that returns its files of one kind."""
    environment = {"STARKILN_KERNEL_CACHE": str(tmp_path)}
    folder, compilations = call_kernel(**environment)
    assert folder.startswith(f"{tmp_path}/starkiln/kernels-")
    assert compilations == 1
    return environment, lambda suffix: sorted(tmp_path.rglob(f"*.{suffix}"))


def test_machine_code_is_found_again(cache):
    environment, files = cache
    assert len(files("nbc")) == len(files("nbi")) == 1
    assert call_kernel(**environment)[1] == 0


@pytest.mark.parametrize("suffix", ["nbc", "nbi"])
@pytest.mark.parametrize("share", [0.0, 0.5, 0.99])
def test_a_truncated_file_is_made_anew_once(cache, suffix, share):
    environment, files = cache
    (file,) = files(suffix)
    os.truncate(file, int(share * file.stat().st_size))
    assert call_kernel(**environment)[1] == 1
    assert call_kernel(**environment)[1] == 0
    assert len(files("nbc")) == len(files("nbi")) == 1


def test_a_damaged_file_takes_the_others_with_it(cache):
    environment, files = cache
    (file,) = files("nbc")
    other = file.with_name("other.nbc")
    other.write_bytes(b"of the same disk")
    file.write_bytes(b"damaged")
    call_kernel(**environment)
    assert not other.exists()


def test_a_full_disk_costs_the_cache_only(tmp_path):
    no_files = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (100, 100))"
    assert call_kernel(no_files, STARKILN_KERNEL_CACHE=str(tmp_path))[1] == 1
    assert not list(tmp_path.rglob("*.nb*"))


def test_a_small_disk_is_left_to_others_but_what_is_there_is_used(tmp_path):
    small = "import shutil, types; shutil.disk_usage = lambda path: types.SimpleNamespace(free=10**6)"
    environment = {"STARKILN_KERNEL_CACHE": str(tmp_path / "small"), "HOME": str(tmp_path / "home")}
    assert call_kernel(small, **environment) == ("None", 1)
    assert not list(tmp_path.rglob("*.nb*"))
    folder, _ = call_kernel(**environment)
    assert call_kernel(small, **environment) == (folder, 0)


@pytest.mark.parametrize("home", [None, "/proc/no-home"])
def test_without_a_home_that_can_be_written_the_cache_is_among_temporary_files(tmp_path, home):
    nobody = 'os.path.expanduser = lambda path: os.environ.get("HOME", path)'
    environment = {"TMPDIR": str(tmp_path)} | ({"HOME": home} if home else {})
    folder, _ = call_kernel(nobody, **environment)
    assert folder.startswith(f"{tmp_path}/starkiln-{os.getuid()}/kernels-")


def test_a_folder_that_anybody_may_write_is_not_used(tmp_path):
    shared = tmp_path / "shared" / "starkiln"
    shared.mkdir(parents=True)
    shared.chmod(0o777)
    folder, _ = call_kernel(XDG_CACHE_HOME=str(shared.parent), HOME=str(tmp_path / "home"))
    assert folder.startswith(f"{tmp_path}/home/.cache/starkiln/kernels-")


def test_without_any_folder_kernels_still_work():
    nowhere = 'import tempfile; tempfile.tempdir = "/proc"; os.path.expanduser = lambda path: path'
    assert call_kernel(nowhere) == ("None", 1)


PARTS = """
import gc
import json
import sys
import numpy as np
sys.path.insert(0, sys.argv[1])
from starkiln.inference import compile as kernels
import two_kernels
result = two_kernels.outer(np.arange(3.0))
files = len(list(kernels.CACHE_FOLDER.rglob("*.nbc")))
print(json.dumps([result, files, two_kernels.inner(2.0), two_kernels.inner(2), kernels.compilations(), gc.isenabled()]))
"""
TWO_KERNELS = """
from starkiln.inference.compile import kernel

@kernel
def inner(x):
    return 10 * x

@kernel
def outer(values):
    total = 0.0
    for i in range(values.size):
        total += inner(values[i])
    return total
"""


@pytest.fixture
def two_kernels(tmp_path):
    """Call two kernels, one of which calls the other, in a process of its own."""
    (tmp_path / "two_kernels.py").write_text(TWO_KERNELS)

    def call():
        shown = subprocess.run(
            [sys.executable, "-c", PARTS, str(tmp_path)],
            env=os.environ | {"STARKILN_KERNEL_CACHE": str(tmp_path / "cache")},
            capture_output=True,
            text=True,
            check=True,
        )
        result, files, of_float, of_integer, compilations, collects = json.loads(shown.stdout)
        assert (result, of_float, of_integer, collects) == (30.0, 20.0, 20, True)
        assert isinstance(of_integer, int)
        return files, compilations

    return call


def test_a_kernel_that_kernels_call_is_kept_only_when_python_calls_it_too(two_kernels):
    assert two_kernels() == (1, 3)
    assert two_kernels() == (3, 0)


def test_machine_code_for_other_types_under_a_kernel_s_name_is_made_anew(two_kernels, tmp_path):
    two_kernels()
    one, other = sorted((tmp_path / "cache").rglob("two_kernels.inner-*.nbc"))
    other.write_bytes(one.read_bytes())
    assert two_kernels()[1] > 0
    assert two_kernels()[1] == 0
