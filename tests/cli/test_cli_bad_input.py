"""Bad input: one line that says what, where and the remedy; exit 2; nothing written."""

import h5py
import numpy as np
import pytest
from small_site import SITE_SECONDS, SITE_START

from dq.cli.main import main


def change(path, old, new):
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))


def unknown_key(config):
    change(config, "[data]", "[transients]\nsnr_treshold = 6\n[data]")


def key_out_of_bounds(config):
    change(config, "[data]", "[vetoes]\nmax_dead_time = 5\n[data]")


def not_toml(config):
    config.write_text("[site\n")


def no_strain_on_the_list(config):
    change(config.parent / "channels.csv", "OV-STRAIN,strain\n", "")


def strain_misspelt(config):
    change(config, 'strain = "OV-STRAIN"', 'strain = "OV-STRIAN"')


def strain_with_another_role(config):
    change(config.parent / "channels.csv", "OV-STRAIN,strain", "OV-STRAIN,auxiliary")


def unknown_role(config):
    change(config.parent / "channels.csv", "OV-A,auxiliary", "OV-A,auxilary")


def channel_name_with_a_path(config):
    change(config.parent / "channels.csv", "OV-A,", "../OV-A,")


def channel_twice(config):
    change(config.parent / "channels.csv", "OV-B,", "OV-A,")


def no_channel_list(config):
    (config.parent / "channels.csv").unlink()


def no_data_files(config):
    (config.parent / "raw" / "a.h5").unlink()


def ready_ends_before_it_starts(config):
    change(config, "[data]", '[data]\nready = "ready.txt"')
    (config.parent / "ready.txt").write_text(
        f"# ready\n{SITE_START} {SITE_START + 9}\n{SITE_START + 60} {SITE_START + 50}\n"
    )


def ready_elsewhere(config):
    change(config, "[data]", '[data]\nready = "ready.txt"')
    (config.parent / "ready.txt").write_text("1000 2000\n")


def strain_constant(config):
    rewrite(config, lambda values, rate: (values * 0 + 4.0, rate))


def strain_all_nan(config):
    rewrite(config, lambda values, rate: (values * np.nan, rate))


def strain_rate_negative(config):
    rewrite(config, lambda values, rate: (values, -rate))


def strain_two_dimensional(config):
    rewrite(config, lambda values, rate: (values.reshape(2, -1), rate))


def rewrite(config, edit):
    """Write the strain's dataset again, changed."""
    with h5py.File(config.parent / "raw" / "a.h5", "r+") as file:
        old = file["0/OV-STRAIN"]
        values, rate = edit(old[:], old.attrs["sample_rate"])
        del file["0/OV-STRAIN"]
        new = file.create_dataset("0/OV-STRAIN", data=values)
        new.attrs["gps_start"] = SITE_START
        new.attrs["sample_rate"] = rate


SPOILT = {
    unknown_key: ("snr_treshold", "snr_threshold"),
    key_out_of_bounds: ("max_dead_time", "5", "1"),
    not_toml: ("dq.toml", "not TOML"),
    no_strain_on_the_list: ("OV-STRAIN", "channels.csv", "role strain"),
    strain_misspelt: ("OV-STRIAN", "OV-STRAIN"),
    strain_with_another_role: ("OV-STRAIN", "auxiliary", "role strain"),
    unknown_role: ("channels.csv", "3", "auxilary"),
    channel_name_with_a_path: ("channels.csv", "../OV-A"),
    channel_twice: ("channels.csv", "OV-A"),
    no_channel_list: ("channels.csv",),
    no_data_files: ("raw/*.h5",),
    ready_ends_before_it_starts: ("ready.txt", "3"),
    ready_elsewhere: ("ready",),
    strain_constant: ("OV-STRAIN", "constant"),
    strain_all_nan: ("OV-STRAIN",),
    strain_rate_negative: ("OV-STRAIN",),
    strain_two_dimensional: ("OV-STRAIN",),
}


@pytest.mark.parametrize("spoil", SPOILT, ids=lambda f: f.__name__)
def test_bad_input_is_one_line_exit_2_and_nothing_written(
    spoil, small_site, tmp_path, tree_of, capsys
):
    config = small_site(dead=False)
    spoil(config)
    before = tree_of(tmp_path)
    times = ["--start", str(SITE_START), "--end", str(SITE_START + SITE_SECONDS)]
    out = tmp_path / "night"
    code = main(["night", str(config), *times, "--out", str(out), "--jobs", "1"])
    err = capsys.readouterr().err
    errors = [line for line in err.splitlines() if line.startswith("dq: error: ")]
    assert code == 2, err
    assert len(errors) == 1
    assert err.splitlines()[-1] == errors[0]
    assert "unexpected" not in errors[0]
    for word in SPOILT[spoil]:
        assert word in errors[0]
    assert tree_of(tmp_path) == before


@pytest.mark.parametrize(
    ("args", "text"),
    [
        (["veto", "{here}"], "holds no manifest.json"),
        (["veto", "{here}/nothing"], "holds no manifest.json"),
        (["report", "{here}"], "holds no manifest.json"),
        (["explain", "{here}", "1420000000"], "holds no manifest.json"),
        (["check", "{here}/none.toml"], "cannot read config"),
        (["check", "{here}"], "cannot read config"),
    ],
)
def test_a_folder_without_a_night_is_refused(args, text, tmp_path, capsys):
    assert main([a.format(here=tmp_path) for a in args]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert text in err
    assert list(tmp_path.iterdir()) == []
