"""The command line: arguments, exit status, what is printed where, and that nothing is written on bad input."""

import os
import re
import signal
import subprocess
import sys
import time

import pytest
from scene_files import SCENES, sound_plate, toml, write

import raytrace
from raytrace import cli
from raytrace.cores import core_count

QUICK = "rays = 1000\nbins = 180\nwavelength_step_nm = 20\npaths = 3"
SMALL = "width_px = 32\nheight_px = 24"
HEAVY = ("numpy", "numba", "colour", "pvlib", "pandas", "scipy", "pydantic", "PIL", "tqdm", "llvmlite")


@pytest.fixture
def quick(tmp_path, monkeypatch):
    """A scene that renders in a moment, in the current folder."""
    monkeypatch.chdir(tmp_path)
    return write(tmp_path, toml(optics=QUICK, camera=SMALL, ground='cover = "none"'))


def told(capsys, *arguments) -> str:
    """The one line that refuses some arguments."""
    assert cli.run(list(arguments)) == 2
    out, err = capsys.readouterr()
    assert out == "" and err.endswith("\n") and err[:-1].isprintable() and "; what works: " in err
    return err[:-1]


def child(*arguments, **options):
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, timeout=120, **{"cwd": SCENES.parent} | options
    )


# --- help and version


@pytest.mark.parametrize("arguments", [["--help"], ["render", "--help"], ["check", "--help"], ["--version"]])
def test_help_loads_nothing_heavy(arguments):
    code = (
        f"import sys; from raytrace.__main__ import main; sys.argv = ['raytrace', *{arguments!r}]; status = main(); "
        f"print(sorted(set(sys.modules) & set({HEAVY!r})), file=sys.stderr); sys.exit(status)"
    )
    done = child("-c", code)
    assert (done.returncode, done.stderr) == (0, "[]\n")
    assert done.stdout.startswith(("usage: raytrace", f"raytrace {raytrace.__version__}"))


def test_a_wrong_command_loads_nothing_heavy():
    code = (
        f"from raytrace.cli import run; run(['rendr']); run([]); import sys; print({{*sys.modules}} & {{*{HEAVY!r}}})"
    )
    assert child("-c", code).stdout == "set()\n"


def test_a_bad_scene_is_refused_before_the_compiler_loads(tmp_path):
    path = write(tmp_path, toml(rain="far_m = 1"))
    code = (
        f"import sys; from raytrace.cli import run; print([run([c, {str(path)!r}]) for c in ('check', 'render')], "
        "{*sys.modules} & {'numba', 'llvmlite', 'pvlib', 'pandas', 'scipy'})"
    )
    assert child("-c", code).stdout == "[2, 2] set()\n"


def test_import_loads_nothing_heavy():
    done = child(
        "-c", f"import raytrace, raytrace.optics, sys; dir(raytrace); print(sorted(set(sys.modules) & set({HEAVY!r})))"
    )
    assert done.stdout == "[]\n"


def test_python_m_and_the_command_are_one(quick):
    done = child("-m", "raytrace", "check", str(quick))
    assert (done.returncode, done.stderr) == (0, "") and done.stdout.startswith("scene ")
    assert child("-m", "raytrace", "chekc").returncode == 2


# --- arguments


@pytest.mark.parametrize(
    ("arguments", "line"),
    [
        ([], "raytrace: no command given; what works: render, compare, check, info, or --help"),
        (["rendr", "a"], "raytrace: 'rendr' is no command; what works: \"render\""),
        (["zzz"], "raytrace: 'zzz' is no command; what works: render or compare or check or info"),
        (["a\nb"], "raytrace: 'a b' is no command; what works: render or compare or check or info"),
        (
            ["render"],
            "raytrace render: the following arguments are required: SCENE; what works: raytrace render --help",
        ),
        (["check"], "raytrace check: the following arguments are required: SCENE; what works: raytrace check --help"),
        (["render", "a", "--sed", "3"], "raytrace: unrecognized arguments: --sed 3 (nearest: --seed)"),
        (["render", "a", "--cache=no"], "raytrace: unrecognized arguments: --cache=no (nearest: --no-cache)"),
        (["info", "--zzz"], "raytrace: unrecognized arguments: --zzz; what works: raytrace --help"),
        (["--zzz"], "raytrace: unrecognized arguments: --zzz"),
        (["render", "a", "--seed"], "raytrace render: argument --seed: expected one argument; what works"),
    ],
)
def test_arguments_that_cannot_be(capsys, arguments, line):
    assert told(capsys, *arguments).startswith(line)


@pytest.mark.parametrize(
    "size", ["640", "x480", "640x", "640x480x3", "-640x480", "6e2x480", "640.0x480", "9" * 30, "", "\u0666x8"]
)
def test_sizes_that_cannot_be(quick, capsys, size):
    line = told(capsys, "render", str(quick), f"--size={size}")
    assert line == f"--size: {size!r} is no size; what works: --size 1280x720"


def test_sizes_and_seeds_out_of_range(quick, capsys, tmp_path):
    for arguments, start, works in (
        (["--size", "7x480"], "camera.width_px: 7 is out of range", "8 to 32768"),
        (["--size", "640x99999"], "camera.height_px: 99999 is out of range", "8 to 32768"),
        (["--seed", str(2**63)], f"optics.seed: {2**63} is out of range", f"0 to {2**63 - 1}"),
    ):
        line = told(capsys, "render", str(quick), *arguments)
        assert line.startswith(f"{quick} with {' '.join(arguments)}: {start}") and line.endswith(works)
    for seed in ("-1", "1.5", "one", "", "9" * 40, "1_0", "\u0663"):
        assert told(capsys, "render", str(quick), f"--seed={seed}") == (
            f"--seed: {seed!r} is no seed; what works: a whole number from 0"
        )
    for threads in ("0", "-1", "two", "", str(core_count() + 1), "9" * 5000, "\u0661"):
        line = told(capsys, "render", str(quick), f"--threads={threads}")
        assert line.startswith("--threads: ") and line.endswith(f"1 to {core_count()}, the cores of this machine")
    assert os.listdir(tmp_path) == ["a.toml"]


def test_a_panorama_takes_no_other_shape_from_the_command_line(tmp_path, capsys):
    scene = write(tmp_path, toml(camera='projection = "panorama"\nwidth_px = 64\nheight_px = 32'))
    assert "width_px = 60, twice the height" in told(capsys, "render", str(scene), "--size", "64x30")


# --- where the picture goes


def test_outputs_that_cannot_be(quick, capsys, tmp_path, monkeypatch):
    (tmp_path / "folder.png").mkdir()
    for output, why in (
        ("a.jpg", "is no name of a PNG file"),
        ("a", "is no name of a PNG file"),
        (".png", "is no name of a PNG file"),
        ("", "is no name of a PNG file"),
        ("folder.png", "is a folder"),
        ("none/a.png", "there is no folder none"),
        ("a.toml/a.png", "there is no folder a.toml"),
        ("x" * 300 + ".png", "cannot be written (File name too long)"),
    ):
        assert f": {why}" in told(capsys, "render", str(quick), "-o", output)
    # root may write everywhere, so the system's answer is put in its mouth
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    assert "the folder . may not be written" in told(capsys, "render", str(quick), "-o", "a.png")
    assert sorted(os.listdir(tmp_path)) == ["a.toml", "folder.png"]


def test_the_picture_never_takes_the_place_of_what_it_is_made_from(quick, capsys, tmp_path):
    scene = tmp_path / "scene.png"
    scene.write_bytes(quick.read_bytes())
    assert "is the scene file itself" in told(capsys, "render", str(scene))
    assert "is the scene file itself" in told(capsys, "render", str(scene), "-o", f"../{tmp_path.name}/scene.png")
    sound_plate(tmp_path / "sky.png")
    text = toml(camera=SMALL, sky='model = "plate"\nplate = "sky.png"')
    assert "is the plate of the scene" in told(capsys, "render", str(write(tmp_path, text)), "-o", "sky.png")
    # by a link, too
    (tmp_path / "link.png").symlink_to("sky.png")
    assert "is the plate of the scene" in told(capsys, "render", str(tmp_path / "a.toml"), "-o", "link.png")
    assert scene.read_bytes().startswith(b"[sun]") and (tmp_path / "sky.png").stat().st_size < 1000


@pytest.mark.skipif(os.name != "posix", reason="pipes and links of POSIX")
def test_the_picture_goes_to_a_regular_file(quick, capsys, tmp_path):
    os.mkfifo(tmp_path / "pipe.png")
    (tmp_path / "link.png").symlink_to("pipe.png")
    for name in ("pipe.png", "link.png"):
        line = told(capsys, "render", str(quick), "-o", name)
        assert line == f"{name}: is a device, a pipe or a socket; what works: the name of a file"
    assert (tmp_path / "pipe.png").is_fifo() and (tmp_path / "link.png").is_symlink()
    (tmp_path / "lost.png").symlink_to("none/a.png")
    assert f"there is no folder {tmp_path / 'none'}" in told(capsys, "render", str(quick), "-o", "lost.png")
    # a link to a file, also to one that is not there yet, stays a link
    (tmp_path / "to.png").symlink_to("b.png")
    assert cli.run(["render", str(quick), "-o", "to.png", "--no-cache"]) == 0
    assert (tmp_path / "to.png").is_symlink() and (tmp_path / "b.png").read_bytes().startswith(b"\x89PNG")


@pytest.mark.skipif(os.name != "posix", reason="descriptors of POSIX")
def test_a_result_never_replaces_where_we_print(quick, tmp_path):
    with open(tmp_path / "out.png", "w") as out:
        command = [sys.executable, "-m", "raytrace", "render", "a.toml", "-o", "out.png"]
        environment = os.environ | {"PYTHONPATH": str(SCENES.parent)}
        done = subprocess.run(command, cwd=tmp_path, env=environment, stdout=out, stderr=subprocess.PIPE, text=True)
    assert (done.returncode, done.stderr) == (2, "out.png: is where our own output goes; what works: another name\n")


def test_nothing_is_written_on_bad_input(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    bad = write(tmp_path, toml(camera="width_px = 1", rain="far_m = 1"))
    for arguments in (["render", str(bad)], ["render", str(bad), "-o", "b.png"], ["render", "none.toml"]):
        assert cli.run(arguments) == 2
        out, err = capsys.readouterr()
        assert out == "" and len(err.splitlines()) == (1 if "none.toml" in arguments else 2)
    assert os.listdir(tmp_path) == ["a.toml"]


# --- render, check, info


def test_render_writes_beside_us_and_ends_with_one_line(quick, capsys, tmp_path):
    assert cli.run(["render", str(quick), "--no-cache"]) == 0
    out, err = capsys.readouterr()
    assert err == "" and sorted(os.listdir(tmp_path)) == ["a.png", "a.toml"]
    # 21 wavelengths of 1000 rays and a few more, so that the blocks are alike: 380 to 780 nm by 20
    number, exposure = r"[\d.e+]+", r"auto \(99\.5 % of pixels below 0\.6 of white\)"
    assert re.fullmatch(
        rf"a\.png: 32x24 px, sun 20\.0 deg up at azimuth 250\.0 deg, white {number} cd/m2 by {exposure}, "
        rf"0\.02\d+ M rays, \d+\.\d s, \d+ clipped, \d+ out of gamut\n",
        out,
    )


def test_render_takes_size_seed_and_threads(quick, capsys, tmp_path):
    from PIL import Image

    pictures = []
    for more in ([], ["--threads", "1"], ["--seed", "1"], ["--seed", "0"], ["--size", "48x16"]):
        assert cli.run(["render", str(quick), "-o", "b.PNG", *more]) == 0, capsys.readouterr().err
        pictures.append((tmp_path / "b.PNG").read_bytes())
    assert pictures[0] == pictures[1] == pictures[3] != pictures[2]
    with Image.open(tmp_path / "b.PNG") as picture:
        assert picture.size == (48, 16)


def test_check_prints_what_render_would_use(quick, capsys):
    assert cli.run(["check", str(quick)]) == 0
    lines = dict(re.split(r"  +", line, maxsplit=1) for line in capsys.readouterr().out.splitlines())
    assert lines["sun"] == "20.00 deg up at azimuth 250.00 deg, apparent"
    assert lines["antisolar point"] == "20.00 deg below the horizon at azimuth 70.00 deg"
    assert lines["rays"] == "1,000 a wavelength, 21 wavelengths, seed 0"
    assert lines["angles"] == "180 bins of 1 deg"
    assert lines["orders"] == "p = 0 to 2: bows 1 to 1"
    assert lines["camera"].startswith("perspective, 90 deg, 32x24 px, looks 15 deg up at azimuth 70.00 deg")
    assert lines["sha-256"] == raytrace.scene.load.scene_hash(raytrace.load_scene(quick))
    # a primary of 42.4 deg in red light about a point 20 deg below the horizon
    assert re.search(r"radius 42\.\d+ deg red, .*; top 22\.\d deg up", lines["rain primary"])
    assert {"air mass", "direct sunlight", "diffuse skylight", "sky", "ground", "exposure", "memory"} <= set(lines)


def test_check_takes_several_files_and_tells_of_each(quick, capsys, tmp_path):
    bad = tmp_path / "b.toml"
    bad.write_text(toml(camera="width_px = 1"))
    assert cli.run(["check", str(bad), str(quick), "none.toml"]) == 2
    out, err = capsys.readouterr()
    assert out.count("sha-256") == 1
    assert [line.split(":")[0] for line in err.splitlines()] == [str(bad), "none.toml"]


def test_info_says_what_the_program_runs_on(capsys, cache_home):
    assert cli.run(["info"]) == 0
    out, err = capsys.readouterr()
    lines = dict(re.split(r"  +", line, maxsplit=1) for line in out.splitlines())
    assert err == "" and lines["raytrace"] == raytrace.__version__
    assert lines["cores"] == f"{core_count()} for this process"
    assert lines["kernel cache"].startswith(str(cache_home)) and lines["table cache"].startswith(str(cache_home))
    assert re.fullmatch(r"\d+ tables, [\d,]+ MB of at most [\d,]+ MB", lines["table cache holds"])
    assert {"numpy", "numba", "pvlib", "pillow", "threading layer"} <= set(lines)


# --- what goes wrong on the way


def test_other_failures_are_one_line_and_status_1(quick, capsys, monkeypatch):
    def fail(problem):
        def run(*arguments, **more):
            raise problem

        return run

    for problem, line in (
        (RuntimeError("a\nb"), "raytrace: RuntimeError: a b\n"),
        (MemoryError(), "raytrace: out of memory; what works: a smaller --size, fewer optics.bins\n"),
    ):
        monkeypatch.setattr("raytrace.report.scene_report", fail(problem))
        assert cli.run(["check", str(quick)]) == 1
        assert capsys.readouterr().err == line
    monkeypatch.setenv("RAYTRACE_DEBUG", "1")
    monkeypatch.setattr("raytrace.report.scene_report", fail(RuntimeError("a")))
    with pytest.raises(RuntimeError):
        cli.run(["check", str(quick)])
    monkeypatch.setattr("raytrace.report.scene_report", fail(KeyboardInterrupt()))
    assert cli.run(["check", str(quick)]) == 130


def test_a_disk_that_fills_is_one_line_and_leaves_nothing(quick, capsys, monkeypatch, tmp_path):
    def full(handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    line = told(capsys, "render", str(quick), "--no-cache")
    assert line.startswith("a.png: cannot be written (No space left on device)")
    assert os.listdir(tmp_path) == ["a.toml"]


def test_warnings_are_one_line(quick, capsys, monkeypatch):
    import warnings

    def warn(*arguments, **more):
        with warnings.catch_warnings(record=False):
            warnings.simplefilter("always")
            warnings.warn("a\nb", UserWarning, stacklevel=1)
        return ""

    monkeypatch.setattr("raytrace.report.scene_report", warn)
    assert cli.run(["check", str(quick)]) == 0
    assert capsys.readouterr().err == "raytrace: warning: a b\n"


@pytest.mark.skipif(os.name != "posix", reason="pipes of POSIX")
@pytest.mark.parametrize("arguments", [["--help"], ["info"]])
def test_a_reader_that_leaves_early_sees_no_traceback(arguments):
    read, write_end = os.pipe()
    os.close(read)
    environment = os.environ | {"PYTHONUNBUFFERED": ""}
    command = [sys.executable, "-m", "raytrace", *arguments]
    done = subprocess.run(
        command, stdout=write_end, stderr=subprocess.PIPE, text=True, cwd=SCENES.parent, env=environment, timeout=120
    )
    os.close(write_end)
    assert (done.returncode, done.stderr) == (1, "")


def test_names_that_the_output_cannot_print(quick, tmp_path):
    odd = tmp_path / "r\u00e9gen.toml"
    odd.write_bytes(quick.read_bytes())
    done = child("-m", "raytrace", "check", str(odd), env=os.environ | {"PYTHONIOENCODING": "ascii"})
    assert (done.returncode, done.stderr) == (0, "") and "r\\xe9gen.toml" in done.stdout


# A scene whose tracing lasts for a minute, in pieces of a fraction of a second, unless it is interrupted
LONG = toml(optics="rays = 100000000\nbins = 180\nwavelength_step_nm = 20", camera=SMALL)
BEGUN = """
import sys
import raytrace.optics.sphere as sphere
from raytrace.cli import run
real = sphere.run_all
def run_all(*arguments, **more):
    print("begun", file=sys.stderr, flush=True)
    sphere.run_all = real
    return real(*arguments, **more)
sphere.run_all = run_all
sys.exit(run(sys.argv[1:]))
"""


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
def test_control_c_in_the_middle_leaves_no_file(tmp_path):
    write(tmp_path, LONG)
    (tmp_path / "a.png").write_bytes(b"old")
    command = [sys.executable, "-c", BEGUN, "render", "a.toml", "--no-cache"]
    environment = os.environ | {"PYTHONPATH": str(SCENES.parent)}
    with subprocess.Popen(
        command, cwd=tmp_path, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        try:
            assert process.stderr.readline() == "begun\n"
            time.sleep(1.0)
            process.send_signal(signal.SIGINT)
            out, err = process.communicate(timeout=60)
        finally:
            process.kill()
    assert (process.returncode, out, err) == (130, "", "raytrace: interrupted; no file was written\n")
    assert sorted(os.listdir(tmp_path)) == ["a.png", "a.toml"] and (tmp_path / "a.png").read_bytes() == b"old"


@pytest.mark.skipif(os.name != "posix", reason="terminals of POSIX")
def test_bars_are_drawn_on_a_terminal_only(quick, tmp_path):
    import fcntl
    import pty
    import struct
    import termios

    command = [sys.executable, "-m", "raytrace", "render", str(quick), "--no-cache"]
    environment = os.environ | {"PYTHONPATH": str(SCENES.parent), "TERM": "dumb"}
    ours, theirs = pty.openpty()
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 100, 0, 0))
    drawn = b""
    with subprocess.Popen(command, cwd=tmp_path, env=environment, stdout=subprocess.PIPE, stderr=theirs) as process:
        os.close(theirs)
        # the terminal's buffer is small, so it is read while they write
        while True:
            try:
                piece = os.read(ours, 4096)
            except OSError:
                break
            if not piece:
                break
            drawn += piece
        out = process.stdout.read()
    os.close(ours)
    assert process.returncode == 0 and out.startswith(b"a.png: 32x24 px")
    assert b"light in drops" in drawn and b"lighting pixels" in drawn and b"100%" in drawn
    plain = subprocess.run(command, cwd=tmp_path, env=environment, capture_output=True, timeout=120)
    assert plain.returncode == 0 and plain.stderr == b""
