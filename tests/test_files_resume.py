"""Runs that are killed, workers that are lost, inputs that change, and every fault of files and disks."""

import contextlib
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import dask
import numpy as np
import pytest
import rasterio
import xarray as xr
import zarr

import bandratio as br
from bandratio.files.stream import _write_block

CENTRES = [480, 600, 700, 830]
NOISE = ["--random", "0.001", "--band-gain", "0.01"]
WAVELENGTHS = ["--wavelengths", "480,600,700,830"]


def write_scene(path: Path, rows=1536, columns=1536, seed=6) -> Path:
    rng = np.random.default_rng(seed)
    with rasterio.open(
        path, "w", driver="GTiff", width=columns, height=rows, count=4, dtype="float32", tiled=True, blockxsize=256,
        blockysize=256, compress="deflate", crs="+proj=eqc +R=1737400", transform=rasterio.Affine(60, 0, 0, 0, -60, 0),
    ) as file:  # fmt: skip
        file.write(rng.uniform(0.05, 0.4, (4, rows, columns)).astype(np.float32))
    return path


@pytest.fixture(scope="module")
def scene(tmp_path_factory) -> Path:
    return write_scene(tmp_path_factory.mktemp("scene") / "scene.tif")


def maps_of(scene, *, noise=None, names=None, size=256):
    cube = br.open_cube(scene, CENTRES, chunks={"y": size, "x": size})
    return br.parameters(cube, noise or br.Noise(random=0.001, band_gain=0.01), names)


def markers(path):
    done = path.with_name(f".{path.name}.unfinished") / "done"
    with contextlib.suppress(FileNotFoundError):
        return sum(marker.suffix == ".npy" for marker in done.iterdir())
    return 0


def command(scene, output, *more):
    # a block at a time, so that there is time to be killed
    code = (
        "import sys, time\n"
        "import bandratio.files.stream as stream, bandratio.files.block_shape as shape\n"
        "shape._PIXELS = 1 << 16\n"
        "marked = stream.write_marker\n"
        "def slowly(*arguments):\n"
        "    time.sleep(0.02)\n"
        "    marked(*arguments)\n"
        "stream.write_marker = slowly\n"
        "from bandratio.__main__ import main\n"
        "main(sys.argv[1:])\n"
    )
    return [sys.executable, "-c", code, "map", str(scene), "-o", str(output), *WAVELENGTHS, *NOISE, *more]


def killed_after(arguments, output, wanted, seconds):
    """Start a run, wait until `wanted` blocks are finished and some time more, and kill it."""
    process = subprocess.Popen(arguments, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    while process.poll() is None and markers(output) < wanted:
        time.sleep(0.005)
    time.sleep(seconds)
    process.send_signal(signal.SIGKILL)
    told = process.communicate()[1].decode()
    return process.returncode, told


@pytest.mark.parametrize(("ending", "kills"), [(".zarr", 3), (".tif", 2)])
def test_killed_again_and_again_and_resumed(tmp_path, scene, ending, kills):
    """Five kills at random moments; what comes out is that of a run that was left alone."""
    rng = np.random.default_rng([len(ending), 7])
    output = tmp_path / f"maps{ending}"
    finished = 0
    for _ in range(kills):
        returned, told = killed_after(
            command(scene, output, "--resume"),
            output,
            finished + int(rng.integers(1, 9)),
            rng.uniform(0, 0.05),
        )
        assert returned == -signal.SIGKILL, told
        assert not output.exists()
        assert markers(output) > finished
        finished = markers(output)
    resumed = subprocess.run(command(scene, output, "--resume"), capture_output=True, text=True, check=False)
    assert resumed.returncode == 0, resumed.stderr
    assert [file.name for file in tmp_path.iterdir()] == [output.name]
    undisturbed = br.write_maps(maps_of(scene), tmp_path / f"undisturbed{ending}")
    assert_equal_bytes(br.open_maps(output), br.open_maps(undisturbed))
    if ending == ".zarr":
        # the closing table is that of all blocks, those of the killed runs too
        exact = np.percentile(br.open_maps(output).red_slope.values, 50)
        row = next(line.split() for line in resumed.stdout.splitlines() if line.startswith("red_slope"))
        assert abs(float(row[2]) - exact) <= 0.01 * max(abs(exact), 0.1)


def assert_equal_bytes(one, other):
    assert set(one.data_vars) == set(other.data_vars)
    for name in one.data_vars:
        assert one[name].values.tobytes() == other[name].values.tobytes()


class Stop(RuntimeError):
    pass


def failing_after(monkeypatch, blocks, error):
    """Let the writing of blocks fail after some, as a disk would."""
    written = []

    def write(*arguments, writer, block_id=None):
        if len(written) >= blocks:
            raise error
        written.append(block_id)
        return _write_block(*arguments, writer=writer, block_id=block_id)

    monkeypatch.setattr("bandratio.files.stream._write_block", write)
    return written


@pytest.fixture
def one_by_one():
    with dask.config.set(scheduler="synchronous"):
        yield


@pytest.mark.usefixtures("one_by_one")
def test_only_unfinished_blocks_are_made_again(tmp_path, scene, monkeypatch):
    output = tmp_path / "maps.zarr"
    before = failing_after(monkeypatch, 11, Stop())
    with pytest.raises(Stop):
        br.write_maps(maps_of(scene), output)
    assert not output.exists()
    after = failing_after(monkeypatch, 1000, Stop())
    br.write_maps(maps_of(scene), output, resume=True)
    assert len(before) == 11
    assert len(after) == 36 - 11
    assert not {*before} & {*after}
    np.testing.assert_array_equal(br.open_maps(output).red_slope, maps_of(scene).red_slope)


@pytest.mark.usefixtures("one_by_one")
def test_without_resume_it_begins_again(tmp_path, scene, monkeypatch):
    output = tmp_path / "maps.zarr"
    failing_after(monkeypatch, 5, Stop())
    with pytest.raises(Stop):
        br.write_maps(maps_of(scene), output)
    again = failing_after(monkeypatch, 1000, Stop())
    br.write_maps(maps_of(scene, names="red_slope"), output)
    assert len(again) == 36
    assert set(br.open_maps(output)) == {"red_slope", "red_slope_sigma"}


@pytest.mark.usefixtures("one_by_one")
def test_a_changed_job_is_refused_with_the_reason(tmp_path, scene, monkeypatch):
    own = write_scene(tmp_path / "own.tif", 512, 512)
    output = tmp_path / "maps.zarr"

    def maps(**options):
        made = maps_of(own, **options)
        made.attrs["input"] = br.open_cube(own, CENTRES).attrs["input"]
        return made

    failing_after(monkeypatch, 2, Stop())
    with pytest.raises(Stop):
        br.write_maps(maps(), output)
    failing_after(monkeypatch, 1000, Stop())

    def resumed(changed):
        br.write_maps(changed, output, resume=True)

    with pytest.raises(
        ValueError, match=r"cannot be resumed, since the noise changed \(was .*0\.001.*, is .*0\.002"
    ):
        resumed(maps(noise=br.Noise(random=0.002, band_gain=0.01)))
    with pytest.raises(ValueError, match=r"since the parameter list changed"):
        resumed(maps(names=["red_slope"]))
    with pytest.raises(ValueError, match=r"since the grid changed"):
        resumed(maps(size=128))
    per_pixel = xr.DataArray(np.full((512, 512), 0.001), dims=("y", "x"))
    other_map = br.Noise(random=per_pixel, band_gain=0.01)
    with pytest.raises(ValueError, match=r"since the noise changed"):
        resumed(maps(noise=other_map))
    # the same description, other reflectances: only the computation's own token tells
    twice = maps()
    twice["red_slope"] = (twice.red_slope * 2).assign_attrs(twice.red_slope.attrs)
    with pytest.raises(ValueError, match=r"since the computation changed; give what the unfinished run had"):
        resumed(twice)
    write_scene(own, 512, 512, seed=9)
    with pytest.raises(ValueError, match=r"since the input changed \(was .*own\.tif.*, is .*own\.tif"):
        resumed(maps())
    # nothing of the unfinished run was lost by asking
    assert markers(output) == 2
    assert not output.exists()


@pytest.mark.usefixtures("one_by_one")
def test_changed_noise_map_of_the_same_description(tmp_path, scene, monkeypatch):
    output = tmp_path / "maps.zarr"
    noises = [
        br.Noise(random=xr.DataArray(np.full((1536, 1536), s), dims=("y", "x"))) for s in (0.001, 0.002)
    ]
    failing_after(monkeypatch, 2, Stop())
    with pytest.raises(Stop):
        br.write_maps(maps_of(scene, noise=noises[0]), output)
    with pytest.raises(ValueError, match=r"since the computation changed"):
        br.write_maps(maps_of(scene, noise=noises[1]), output, resume=True)


@pytest.mark.parametrize("ending", [".zarr", ".tif", ".nc"])
def test_killed_between_the_last_move_and_the_end(tmp_path, scene, monkeypatch, ending):
    """The output is in place, but the run could not clean up: resuming does just that."""
    output = tmp_path / f"maps{ending}"
    maps = maps_of(scene, names="red_slope", size=768)
    with monkeypatch.context() as patch:
        patch.setattr("bandratio.files.stage.Stage.remove", lambda self: (_ for _ in ()).throw(Stop()))
        with pytest.raises(Stop):
            br.write_maps(maps, output)
    assert output.exists()
    assert len(list(tmp_path.iterdir())) == 2
    br.write_maps(maps, output, resume=True)
    assert [file.name for file in tmp_path.iterdir()] == [output.name]
    np.testing.assert_array_equal(br.open_maps(output).red_slope, maps.red_slope)


def test_two_runs_into_one_output(tmp_path, scene):
    output = tmp_path / "maps.zarr"
    first = subprocess.Popen(command(scene, output), stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    while first.poll() is None and markers(output) < 1:
        time.sleep(0.01)
    try:
        with pytest.raises(FileExistsError, match=r"maps\.zarr: another run is writing it now"):
            br.write_maps(maps_of(scene), output)
    finally:
        first.kill()
        first.communicate()


@pytest.mark.usefixtures("one_by_one")
@pytest.mark.parametrize("ending", [".zarr", ".tif"])
def test_corrupt_tile(tmp_path, monkeypatch, ending):
    own = write_scene(tmp_path / "own.tif", 512, 768)
    output = tmp_path / f"maps{ending}"
    with monkeypatch.context() as patch:
        finished = failing_after(patch, 4, Stop())
        with pytest.raises(Stop):
            br.write_maps(maps_of(own), output)
    row, column = next(place for place in np.ndindex(2, 3) if place not in finished)
    whole, state = own.read_bytes(), own.stat()
    with rasterio.open(own) as file:
        offset = int(file.get_tag_item(f"BLOCK_OFFSET_{column}_{row}", "TIFF", bidx=1))
    own.write_bytes(whole[:offset] + b"\xff" * 4000 + whole[offset + 4000 :])
    os.utime(own, ns=(state.st_atime_ns, state.st_mtime_ns))
    place = f"rows {256 * row}–{256 * row + 255}, columns {256 * column}–{256 * column + 255}"
    with pytest.raises(
        OSError,
        match=rf"own\.tif: the block of {place} cannot be read .*; [45] of 6 blocks are finished and kept: run the same "
        "again with --resume",
    ):
        br.write_maps(maps_of(own), output, resume=True)
    assert not output.exists()
    assert 4 <= markers(output) < 6
    # restored from its origin, of the same age and size, it is the input that it was
    own.write_bytes(whole)
    os.utime(own, ns=(state.st_atime_ns, state.st_mtime_ns))
    br.write_maps(maps_of(own), output, resume=True)
    np.testing.assert_array_equal(br.open_maps(output).red_slope, maps_of(own).red_slope)


def test_corrupt_chunk_of_a_store(tmp_path):
    store = tmp_path / "cube.zarr"
    values = np.random.default_rng(8).uniform(0.1, 0.3, (4, 64, 64)).astype(np.float32)
    cube = br.as_cube(values, CENTRES).chunk({"y": 32, "x": 32})
    cube.to_dataset().to_zarr(store, zarr_format=2)
    (store / "reflectance" / "0.1.0").write_bytes(b"\xff" * 500)
    with pytest.raises(OSError, match=r"cube\.zarr: the block of rows 0–63, columns 0–63 cannot be read"):
        br.open_cube(store).compute()


def test_file_that_vanished(tmp_path):
    own = write_scene(tmp_path / "own.tif", 300, 300)
    maps = maps_of(own)
    own.unlink()
    with pytest.raises(OSError, match=r"own\.tif: the block of rows \d+–\d+, columns \d+–\d+ cannot be read"):
        br.write_maps(maps, tmp_path / "maps.zarr")
    assert list(tmp_path.iterdir()) == []


def full_disk(folder: Path, megabytes: int):
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={megabytes}m", "tmpfs", str(folder)],
        capture_output=True,
        check=False,
    )
    if mounted.returncode:
        pytest.skip("a small disk cannot be mounted here (needs the right to mount)")


@pytest.mark.parametrize("ending", [".zarr", ".tif"])
def test_full_disk(tmp_path, scene, ending):
    disk = tmp_path / "disk"
    disk.mkdir()
    full_disk(disk, 30)
    try:
        output = disk / f"maps{ending}"
        run = subprocess.run(command(scene, output), capture_output=True, text=True, check=False)
        assert run.returncode == 2
        assert run.stdout == ""
        assert len(run.stderr.splitlines()) == 1, run.stderr
        assert f"maps{ending}: the block of rows" in run.stderr
        assert "cannot be written (No space left on device)" in run.stderr
        assert "blocks are finished and kept" in run.stderr
        assert not output.exists()
        kept = markers(output)
        assert kept > 0
        subprocess.run(["mount", "-o", "remount,size=400m", str(disk)], check=True)
        again = subprocess.run(
            command(scene, output, "--resume"), capture_output=True, text=True, check=False
        )
        assert again.returncode == 0, again.stderr
        np.testing.assert_array_equal(br.open_maps(output).red_slope, maps_of(scene).red_slope)
    finally:
        subprocess.run(["umount", "--lazy", str(disk)], check=False)  # maps may still be open


def test_disk_that_fails_by_the_system_call(tmp_path, scene, monkeypatch):
    """The same without the right to mount: the very error that the system gives."""
    import errno

    with monkeypatch.context() as patch, dask.config.set(scheduler="synchronous"):
        marked = []

        def write_marker(folder, block, counts):
            if len(marked) == 3:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            marked.append(block)
            from bandratio.files.stage import write_marker as real

            real(folder, block, counts)

        patch.setattr("bandratio.files.stream.write_marker", write_marker)
        with pytest.raises(
            OSError, match=r"the block of rows \d+–\d+, columns \d+–\d+ cannot be written \(No space left"
        ):
            br.write_maps(maps_of(scene), tmp_path / "maps.zarr")
    assert markers(tmp_path / "maps.zarr") == 3


def test_lost_worker(tmp_path):
    """A worker is killed in mid-run; the others make its blocks, and the result is the same."""
    from distributed import Client, LocalCluster

    own = write_scene(tmp_path / "own.tif", 480, 480)
    output = tmp_path / "maps.zarr"
    lost = []

    def kill_one(finished, total):
        if finished >= 3 and not lost:
            worker = next(iter(cluster.workers.values()))
            lost.append(worker.pid)
            os.kill(worker.pid, signal.SIGKILL)

    with (
        dask.config.set(
            {"distributed.admin.log-format": "%(message)s", "logging": {"distributed": "critical"}}
        ),
        LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None, silence_logs=50) as cluster,
        Client(cluster),
    ):
        from bandratio.files import write_and_count

        write_and_count(maps_of(own, names="red_slope", size=32), output, progress=kill_one)
    assert len(lost) == 1
    with dask.config.set(scheduler="threads"):
        undisturbed = br.write_maps(maps_of(own, names="red_slope", size=32), tmp_path / "undisturbed.zarr")
        assert_equal_bytes(br.open_maps(output), br.open_maps(undisturbed))


def test_command_on_a_cluster(tmp_path, scene):
    from distributed import LocalCluster

    output = tmp_path / "maps.zarr"
    with LocalCluster(n_workers=1, threads_per_worker=1, dashboard_address=None, silence_logs=50) as cluster:
        seen = len(cluster.scheduler.transition_log)
        run = subprocess.run(
            [sys.executable, "-m", "bandratio", "map", str(scene), "-o", str(output), *WAVELENGTHS, *NOISE,
             "--scheduler", cluster.scheduler_address],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert run.returncode == 0, run.stderr
        assert len(cluster.scheduler.transition_log) > seen
    np.testing.assert_array_equal(br.open_maps(output).red_slope, maps_of(scene).red_slope)


def test_scheduler_that_is_not_there(tmp_path, scene):
    arguments = ["map", str(scene), "-o", str(tmp_path / "maps.zarr"), *WAVELENGTHS]
    run = subprocess.run(
        [sys.executable, "-m", "bandratio", *arguments, "--scheduler", "tcp://127.0.0.1:1"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert run.returncode == 2
    assert run.stderr.startswith("bandratio: no dask scheduler answers at tcp://127.0.0.1:1")
    assert len(run.stderr.splitlines()) == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("ending", [".zarr", ".tif"])
def test_memory_does_not_grow_with_the_scene(tmp_path, ending):
    """Peak resident memory of a child that maps an input of 1 GiB, which is nearly all of the bound."""
    if ending == ".zarr":
        rows, columns = 8192, 8192
        path = tmp_path / "scene.img"
        with path.open("wb") as file:
            file.truncate(16 * rows * columns)
        path.with_suffix(".hdr").write_text(
            f"ENVI\nsamples = {columns}\nlines = {rows}\nbands = 4\nheader offset = 0\ndata type = 4\n"
            "interleave = bip\nbyte order = 0\nwavelength = {480, 600, 700, 830}\n"
        )
    else:
        path = write_scene(tmp_path / "scene.tif")
    code = (
        "import resource, sys\n"
        "from bandratio.__main__ import main\n"
        "try:\n"
        "    main(sys.argv[1:])\n"
        "finally:\n"
        "    print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss, file=sys.stderr)\n"
    )
    run = subprocess.run(
        [sys.executable, "-c", code, "map", str(path), "-o", str(tmp_path / f"maps{ending}"), *WAVELENGTHS, *NOISE,
         "--workers", "2"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert run.returncode == 0, run.stderr
    assert int(run.stderr.split()[-1]) * 1024 <= 1.5 * 2**30


def test_blocks_are_computed_by_one_thread_each(tmp_path, scene, monkeypatch):
    """The scheduler's threads are all that work: the compiled loop starts none of its own beside them."""

    def refuse(*arguments, **options):
        raise AssertionError("a second pool of threads within a block")

    monkeypatch.setattr("bandratio.kernel.ThreadPoolExecutor", refuse)
    with dask.config.set(scheduler="threads", num_workers=2):
        br.write_maps(maps_of(scene, size=768), tmp_path / "maps.zarr")


@pytest.mark.usefixtures("one_by_one")
def test_full_disk_while_a_netcdf_file_is_finished(tmp_path, scene, monkeypatch):
    def write(*arguments, **options):
        raise RuntimeError("Unable to flush file (file write failed: errno = 28)")

    with monkeypatch.context() as patch:
        patch.setattr(xr.Dataset, "to_netcdf", write)
        with pytest.raises(
            OSError, match=r"maps\.nc: the finished file cannot be written .*errno = 28.*36 of 36 blocks"
        ):
            br.write_maps(maps_of(scene), tmp_path / "maps.nc")
    assert not (tmp_path / "maps.nc").exists()
    written = failing_after(monkeypatch, 0, Stop())
    br.write_maps(maps_of(scene), tmp_path / "maps.nc", resume=True)
    assert written == []


def test_blocks_of_nothing_are_not_stored(tmp_path):
    values = np.full((4, 512, 512), np.nan, np.float32)
    values[:, :256, :256] = 0.2
    cube = br.as_cube(values, CENTRES).chunk({"y": 256, "x": 256})
    output = br.write_maps(br.parameters(cube, names="red_slope"), tmp_path / "maps.zarr")
    assert len(list((output / "red_slope").glob("[0-9]*"))) == 1
    assert zarr.open_array(output, path="red_slope", mode="r").shape == (512, 512)
    assert int(br.open_maps(output).red_slope.isnull().sum()) == 512 * 512 * 3 // 4
