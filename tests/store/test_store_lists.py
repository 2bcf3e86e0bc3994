"""The small input files: channel list, ready segments, test signals."""

import pytest

from dq.errors import InputError
from dq.segments import Segments
from dq.store import read_channel_list, read_injections, read_ready


def listing(tmp_path, text):
    path = tmp_path / "channels.csv"
    path.write_text(text)
    return path


def test_channel_list_is_read(tmp_path):
    path = listing(
        tmp_path,
        "channel,role,safe,f_low_hz,f_high_hz,quantity,unit,description\n"
        "OV-STRAIN,strain,,20,,strain,,the main channel\n"
        '# a comment\n\nOV-A.x_1:y,auxiliary,no,,500,voltage,V,"noisy, on Mondays"\n',
    )
    strain, other = read_channel_list(path)
    assert (strain.name, strain.role, strain.f_low_hz) == ("OV-STRAIN", "strain", 20)
    assert (other.safe, other.f_high_hz) == ("no", 500)
    assert other.description == "noisy, on Mondays"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "column 'channel' is missing"),
        ("channel,role\n", "lists no channel"),
        ("channel,role,colour\nA,strain,red\n", "unknown column 'colour'"),
        ("channel,role,role\nA,strain,strain\n", "twice in the header"),
        ("channel,role\nA,strain\nA,auxiliary\n", "line 3: channel 'A' stands already"),
        ("channel,role\nA,main\n", "line 2: role = 'main' must be one of"),
        ("channel,role\n_A,strain\n", "channel name '_A' is not allowed"),
        ("channel,role\n../../etc,strain\n", "'../../etc' is not allowed"),
        ("channel,role,safe\nA,strain,maybe\n", "safe = 'maybe'"),
        ("channel,role,f_low_hz\nA,strain,-3\n", "f_low_hz = '-3' must be a positive"),
        ("channel,role,f_low_hz,f_high_hz\nA,strain,9,3\n", "must be above f_low_hz"),
        ("channel,role\nA\n", "line 2: 1 cells where the header has 2"),
    ],
)
def test_mistakes_in_the_list_are_one_clear_line(tmp_path, text, message):
    with pytest.raises(InputError, match=message) as caught:
        read_channel_list(listing(tmp_path, text))
    assert "\n" not in str(caught.value)


def test_name_of_300_letters_is_refused_shortly(tmp_path):
    with pytest.raises(InputError, match="is not allowed") as caught:
        read_channel_list(listing(tmp_path, f"channel,role\n{'A' * 300},strain\n"))
    assert len(str(caught.value)) < 300


def test_missing_and_binary_files(tmp_path):
    with pytest.raises(InputError, match="cannot read channel list"):
        read_channel_list(tmp_path / "none.csv")
    (tmp_path / "x").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="no UTF-8 text"):
        read_ready(tmp_path / "x")


def test_ready_and_injections(tmp_path):
    (tmp_path / "ready.txt").write_text("# ready\n10 20\n20,30 # more\n")
    assert read_ready(tmp_path / "ready.txt") == Segments.from_seconds([10], [30])
    (tmp_path / "inj.csv").write_text("gps_time,kind,snr\n12.5,chirp,20\n14,,\n")
    table = read_injections(tmp_path / "inj.csv")
    assert table.gps_time.tolist() == [12.5, 14]
    assert table.snr.isna().tolist() == [False, True]
    (tmp_path / "inj.csv").write_text("gps_time\nnoon\n")
    with pytest.raises(InputError, match="line 2: 'noon' is no GPS time"):
        read_injections(tmp_path / "inj.csv")
