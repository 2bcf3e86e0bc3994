"""The frame of the command line: help, version, one-line errors, exit codes."""

import subprocess
import sys
import time

import click
import pytest

from dq.cli import main as frame
from dq.cli.main import VERBS, main
from dq.errors import BusyError, InputError, OutputError

FLOW = [
    "demo",
    "check",
    "find",
    "train",
    "sort",
    "night",
    "veto",
    "explain",
    "report",
]


def run_python(*args, **options):
    return subprocess.run(
        [sys.executable, *args], capture_output=True, text=True, check=False, **options
    )


@pytest.fixture
def verb(monkeypatch):
    """Replace the verb ``check`` by one that raises an error or returns a code."""

    def put(error=None, code=None):
        @click.command("check", params=[frame.debug_option()])
        def command():
            if error is not None:
                raise error
            return code

        monkeypatch.setattr(
            frame, "import_module", lambda name: type("M", (), {"command": command})
        )

    return put


def test_help_lists_the_verbs_in_flow_order(capsys):
    assert main(["--help"]) == 0
    listed = [line.split()[0] for line in capsys.readouterr().out.splitlines() if line]
    assert [word for word in listed if word in FLOW] == FLOW
    assert list(VERBS) == FLOW


def test_no_arguments_give_the_help(capsys):
    assert main([]) == 0
    assert "Usage: dq" in capsys.readouterr().out


@pytest.mark.parametrize("name", FLOW)
def test_every_verb_has_help_with_an_example(name, capsys):
    assert main([name, "--help"]) == 0
    out = capsys.readouterr().out
    example = out.split("Example:\n")[1].strip()
    assert example.startswith(f"dq {name} ")
    command = frame.root.get_command(None, name)
    with command.make_context(name, example.split()[2:], obj={}):
        pass  # the example parses


def test_version(capsys):
    from importlib.metadata import version

    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"dq {version('dq')}\n"


def test_module_is_the_command():
    done = run_python("-m", "dq", "--version")
    assert done.returncode == 0
    assert done.stdout.startswith("dq ")


def test_help_loads_no_heavy_library_and_answers_at_once():
    code = (
        "import sys; from dq.cli.main import main; main(['--help']); "
        "heavy = {'numpy', 'pandas', 'h5py', 'scipy', 'matplotlib', 'sklearn', "
        "'astropy', 'jinja2', 'pydantic', 'numba', 'tqdm'} & set(sys.modules); "
        "print('HEAVY', sorted(heavy))"
    )
    assert "HEAVY []" in run_python("-c", code).stdout
    seconds = []
    for _ in range(3):
        began = time.perf_counter()
        assert run_python("-m", "dq", "--help").returncode == 0
        seconds.append(time.perf_counter() - began)
    assert min(seconds) < 0.5  # the bound of the issue that asked for it


def test_import_dq_loads_no_stage():
    code = (
        "import sys, dq; print(sorted(m for m in sys.modules if m.startswith('dq.') "
        "or m in ('numpy', 'pandas', 'h5py')))"
    )
    assert run_python("-c", code).stdout.strip() == "[]"


def test_public_names_resolve():
    import dq

    for name in dq.__all__:
        assert getattr(dq, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        _ = dq.nonsense


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (InputError("bad\n  input"), 2),
        (BusyError("held"), 2),
        (OutputError("disk full"), 1),
        (ZeroDivisionError("oops"), 1),
        (MemoryError(), 1),
        (KeyboardInterrupt(), 130),
        (click.UsageError("no"), 2),
    ],
)
def test_an_error_is_one_line_and_a_code(verb, capsys, error, code):
    verb(error)
    assert main(["check"]) == code
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.count("\n") == 1
    assert captured.err.startswith("dq: error: ")
    assert "Traceback" not in captured.err


@pytest.mark.parametrize("args", [["--debug", "check"], ["check", "--debug"]])
def test_debug_shows_the_traceback(verb, capsys, args):
    verb(InputError("bad input"))
    assert main(args) == 2
    err = capsys.readouterr().err
    assert "Traceback" in err
    assert err.splitlines()[-1] == "dq: error: bad input"


def test_a_verb_gives_its_exit_code(verb):
    verb(code=3)
    assert main(["check"]) == 3


def test_a_closed_pipe_is_quiet():
    code = (
        "import sys, click; from dq.cli import main as m\n"
        "@click.command('check')\n"
        "def c():\n"
        "    [click.echo('x' * 1000) for _ in range(10000)]\n"
        "m.import_module = lambda name: type('M', (), {'command': c})\n"
        "sys.exit(m.main(['check']))"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        process.stdout.readline()
        process.stdout.close()
        assert process.stderr.read() == b""
    assert process.returncode == 0


@pytest.mark.parametrize(
    ("args", "text"),
    [
        (["nigt"], "No such command 'nigt'"),
        (["night"], "Missing argument 'CONFIG'"),
        (["night", "c", "--start", "1"], "Missing option '--end'"),
        (["night", "c", "--strat", "1"], "No such option"),
        (["find", "c", "X", "--start", "yesterday", "--end", "2"], "no GPS time"),
        (["find", "c", "X", "--start", "nan", "--end", "2"], "must lie within"),
        (["find", "c", "X", "--start", "-5", "--end", "2"], "must lie within"),
        (["find", "c", "X", "--start", "1e300", "--end", "2"], "must lie within"),
        (["find", "c", "X", "--start", "1.0000000001", "--end", "2"], "nanosecond"),
        (["find", "c", "X", "--start", "1", "--end", "2", "--snr", "nan"], "no number"),
        (["find", "c", "X", "--start", "1", "--end", "2", "--out", "x.png"], ".h5"),
        (["veto", "d", "--max-dead-time", "1.5"], "0.0<=x<=1.0"),
        (
            ["night", "c", "--start", "1", "--end", "2", "--out", "o", "--jobs", "0"],
            "1",
        ),
    ],
)
def test_wrong_usage_is_one_line_and_exit_2(args, text, capsys):
    assert main(args) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert err.startswith("dq: error: ")
    assert text in err
