import re
from fractions import Fraction
from pathlib import Path

import pytest

from enhance.batch import read_job
from enhance.errors import JobError
from enhance.settings import ClipSettings, Window

EVERY_KEY = """
title = "Labelling wheel, line 3"
[frames]
source = "frames"
times = "frames.csv"
exposure = "20 ms"
time_marks = "end"
light_curve = "gamma 2.2"
black = 16
white = 4095.5
shutter = "global"
mosaic = "none"
crop = [1, 2, 300, 200]
[events]
source = "events.h5"
columns = { t = "/cam/ts", p = "/cam/pol" }
time_unit = "ns"
size = [346, 260]
cover = ["-1 s", "60 s"]
[rig]
file = "rig.toml"
contrast = [0.20, 0.22]
clock = { offset = "-6.4 ms", drift_ppm = 12 }
registration = "shared"
unknown = "frames"
[slow_motion]
scene_rate = 959.94
playback_rate = 25
windows = [{ from = "2.10 s", to = "2.25 s" }, { from = "0 s", to = "1 s" }]
[measure]
hold_out = 4
least_psnr = 30
[network]
use = "off"
[output]
folder = "out/wheel"
video = "ffv1"
stills = "deblurred"
times = ["2.134 s", "1 s", "1 s"]
strip = true
trust = true
"""


def mistakes_of(path: Path) -> list[str]:
    with pytest.raises(JobError) as caught:
        read_job(path)
    return list(caught.value.mistakes)


def test_every_key_of_the_contract_arrives(write_job, tmp_path: Path) -> None:
    (tmp_path / "rig.toml").touch()
    settings = read_job(write_job(text=EVERY_KEY))
    frames, events, rig, slow, output = (
        settings.frames,
        settings.events,
        settings.rig,
        settings.slow_motion,
        settings.output,
    )
    assert (settings.title, settings.hold_out, settings.network) == ("Labelling wheel, line 3", 4, "off")
    assert settings.least_psnr == 30.0
    assert (frames.source, frames.times) == (tmp_path / "frames", tmp_path / "frames.csv")
    assert (frames.exposure_us, frames.time_marks, frames.light_curve) == (20_000, "end", "gamma 2.2")
    assert (frames.black, frames.white, frames.crop) == (16, 4095.5, (1, 2, 300, 200))
    assert events.source == tmp_path / "events.h5"
    assert (events.columns, events.time_unit) == ({"t": "/cam/ts", "p": "/cam/pol"}, "ns")
    assert (events.size, events.cover_us) == ((346, 260), (-1_000_000, 60_000_000))
    assert (rig.file, rig.contrast, rig.unknown) == (tmp_path / "rig.toml", (0.20, 0.22), "frames")
    assert (rig.offset_us, rig.drift_ppm) == (-6400, 12)
    assert (slow.factor, slow.scene_rate, slow.playback_rate) == (None, Fraction(95994, 100), Fraction(25))
    assert slow.windows == (Window(0, 1_000_000), Window(2_100_000, 2_250_000))
    assert output.folder == tmp_path / "out" / "wheel"
    assert (output.video, output.stills, output.strip, output.trust) == ("ffv1", "deblurred", True, True)
    assert output.times_us == (1_000_000, 2_134_000)


def test_what_is_left_out_gets_the_contracts_defaults(write_job) -> None:
    settings = read_job(write_job())
    assert settings == ClipSettings(title="job", frames=settings.frames, events=settings.events, output=settings.output)
    assert (settings.frames.black, settings.frames.white, settings.frames.exposure_us) == (None, None, None)
    assert (settings.output.video, settings.output.stills, settings.output.strip) == ("h264", "all", False)
    assert (settings.output.trust, settings.least_psnr) == (False, None)
    assert (settings.rig.contrast, settings.rig.offset_us, settings.rig.unknown) == (None, None, "stop")


def test_slow_motion_without_a_number_makes_eight_pictures_a_span(write_job) -> None:
    slow = read_job(write_job({"slow_motion.playback_rate": "30"})).slow_motion
    assert (slow.factor, slow.scene_rate) == (8, None)


@pytest.mark.parametrize(
    ("clock", "offset", "drift"),
    [
        ('"estimate"', None, None),
        ('"shared"', 0, 0.0),
        ('{ offset = "1 ms" }', 1000, None),
        ("{ drift_ppm = 3.5 }", None, 3.5),
    ],
)
def test_every_form_of_clock(write_job, clock: str, offset: int | None, drift: float | None) -> None:
    rig = read_job(write_job({"rig.clock": clock, "rig.contrast": '"estimate"'})).rig
    assert (rig.offset_us, rig.drift_ppm, rig.contrast) == (offset, drift, None)


def test_a_byte_order_mark_and_windows_line_ends_are_read(write_job) -> None:
    path = write_job()
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes().replace(b"\n", b"\r\n"))
    assert read_job(path).title == "job"


def test_five_distinct_mistakes_are_reported_at_once_each_with_its_line(write_job) -> None:
    path = write_job(
        {
            "frames.exposure": "20",
            "events.time_unit": '"usec"',
            "slow_motion.factr": "8",
            "slow_motion.windows": '[{ from = "2 s", to = "1 s" }]',
            "output.strip": '"yes"',
        }
    )
    assert mistakes_of(path) == [
        'line 5: frames.exposure: 20 has no unit; write for example "20 ms" (s, ms, us or ns)',
        'line 8: events.time_unit: found "usec"; expected one of "s", "ms", "us", "ns"; did you mean "us"?',
        'line 11: output.strip: found "yes"; expected true or false, without quotation marks',
        "line 13: slow_motion.factr: is not a known key; did you mean slow_motion.factor?",
        'line 14: slow_motion.windows[0]: from "2 s" to "1 s" has no length; to must be after from',
    ]
    with pytest.raises(JobError, match=r"job\.toml: 5 mistakes in the job file"):
        read_job(path)


WRONG = [
    ({"title": "3"}, 'title: found 3; expected text in quotation marks, such as "name"'),
    ({"title": '""'}, "title: is empty; write a name, or leave the key out"),
    ({"output.folder": '"a\\u0000b"'}, "output.folder: holds a zero byte, which no name can"),
    ({"frames.source": None}, "line 1: frames.source: is missing; this key is always required"),
    ({"events.source": None}, "^events.source: is missing"),
    ({"output.folder": None}, "^output.folder: is missing"),
    ({"output": "3"}, "output: found 3; expected a table of keys"),
    ({"frames.exposure": "true"}, 'expected a time with its unit, for example "20 ms"'),
    ({"frames.exposure": '"20"'}, "'20' is not a time with its unit"),
    ({"frames.exposure": '"20 sec"'}, "'20 sec' is not a time with its unit"),
    ({"frames.exposure": '"-1 ms"'}, "found '-1 ms'; a time below 0 is not possible here"),
    ({"frames.black": '"0"'}, 'found the text "0"; expected a number, without quotation marks'),
    ({"frames.black": "[0]"}, "expected a number"),
    ({"frames.white": "inf"}, "found inf; expected a finite number"),
    ({"frames.black": "9", "frames.white": "9"}, "white: found 9; full scale must be above black, which is 9"),
    ({"frames.light_curve": '"sRGB"'}, "'sRGB' is not a light curve"),
    ({"frames.light_curve": "2.2"}, 'expected text, such as "srgb"'),
    ({"frames.light_curve": None}, "frames.light_curve: is missing; images do not say what their code values mean"),
    ({"frames.times": None}, "frames.times: is missing; images do not say when they were taken"),
    ({"frames.time_marks": '"begin"'}, 'found "begin"; expected one of "start", "middle", "end"'),
    ({"frames.crop": "[0, 0, 9]"}, r"expected four whole numbers: \[x, y, width, height\]"),
    ({"frames.crop": "[0, 0, 9, 0]"}, "x and y start at 0, width and height are 1 or more"),
    ({"frames.shutter": '"leaf"'}, "found 'leaf'; expected \"global\""),
    ({"frames.mosaic": '"RGBG"'}, "found 'RGBG'; expected none, RGGB, BGGR, GRBG or GBRG"),
    ({"events.size": "[346]"}, "events.size: found 1 values; expected 2"),
    ({"events.size": '[346, "260"]'}, r'events.size\[1\]: found "260"; expected a whole number'),
    ({"events.size": "346"}, r"found 346; expected a list, such as \[1, 2\]"),
    ({"events.size": "[346, 0]"}, "found 0; expected 1 or more"),
    ({"events.cover": '["2 s", "1 s"]'}, "the end must be after the start"),
    ({"events.columns": '{ q = "x" }'}, "events.columns.q: is not a known key; known here: t, x, y, p"),
    ({"rig.contrast": "0.2"}, "expected two thresholds, positive and negative"),
    ({"rig.contrast": "[20, 22]"}, r"found \[20, 22\]; a threshold is a difference of natural logarithms"),
    ({"rig.contrast": "[0, 0.2]"}, "above 0, at most 2"),
    ({"rig.clock": '"free"'}, 'drift_ppm = 0.0 }, { triggers = "triggers.csv" }, "shared" or'),
    ({"rig.clock": "{}"}, 'drift_ppm = 0.0 }, { triggers = "triggers.csv" }, "shared" or'),
    ({"rig.clock": "{ offset = 5 }"}, "rig.clock.offset: 5 has no unit"),
    ({"slow_motion.factor": "0"}, "slow_motion.factor: found 0; expected 1 or more"),
    ({"slow_motion.factor": "1001"}, "found 1001; expected 1000 or less"),
    ({"slow_motion.factor": "8.0"}, "found 8.0; expected a whole number"),
    ({"slow_motion.factor": "8", "slow_motion.scene_rate": "960"}, "keep one and leave the other out"),
    ({"slow_motion.scene_rate": "0"}, "found 0; a rate is above 0 pictures a second"),
    ({"slow_motion.playback_rate": '"30"'}, 'found the text "30"; expected a number'),
    (
        {"slow_motion.scene_rate": "9", "slow_motion.windows": '[{ from = "0 s", to = "1 s", factor = 2 }]'},
        r"windows\[0\].factor: a window's own factor does not go with scene_rate",
    ),
    (
        {"slow_motion.windows": '[{ from = "1 s", to = "3 s" }, { from = "0 s", to = "1001 ms" }]'},
        r'windows\[0\]: starts at "1 s", before the window that ends at "1001 ms" is over',
    ),
    ({"slow_motion.windows": '[{ from = "1 s" }]'}, r"windows\[0\].to: is missing"),
    ({"slow_motion.windows": '[{ from = "1 s", to = "2 s", facter = 2 }]'}, "did you mean slow_motion.windows.*factor"),
    ({"measure.hold_out": "1"}, "found 1; every frame would be used and none be left to compare with"),
    ({"measure.hold_out": "-2"}, "found -2; expected 0 or more"),
    ({"measure.hold_out": "true"}, "found true; expected a whole number"),
    ({"measure.least_psnr": "-3"}, "least_psnr: found -3; pictures can be asked to reach 0 dB or more, such as 30"),
    ({"measure.least_psnr": "nan"}, "measure.least_psnr: found nan; expected a finite number"),
    ({"measure.least_psnr": "-inf"}, "measure.least_psnr: found -inf; expected a finite number"),
    (
        {"measure.least_psnr": '"30 dB"'},
        'least_psnr: found the text "30 dB"; expected a number, without quotation marks',
    ),
    ({"network.use": '"fuse"'}, 'did you mean "fusion"'),
    ({"output.video": '"h265"'}, 'expected one of "h264", "ffv1", "none"; did you mean "h264"'),
    ({"output.times": '["1 s", 2]'}, r"output.times\[1\]: 2 has no unit"),
    ({"output.trust": "1"}, "output.trust: found 1; expected true or false, without quotation marks"),
    (
        {"output.trust": "true", "output.stills": '"none"'},
        'trust: found true, but .* none is written: .*Write stills = "all"',
    ),
    ({"netwrk.use": '"off"'}, "netwrk: is not a known key; did you mean network"),
    ({"output.factor": "3"}, "output.factor: is not a known key here; did you mean slow_motion.factor"),
    ({"rig.registration": '"splitter"'}, 'expected "shared", "estimate", a matrix of three rows such as'),
    ({"rig.registration": "[[4, 0, 1.5], [0, 4, 1.5]]"}, "a matrix of three rows such as"),
    ({"rig.registration": '[[4, 0, "x"], [0, 4, 1.5], [0, 0, 1]]'}, 'found the text "x"; expected a number'),
    ({"rig.registration": "[[4, 8, 1], [2, 4, 3], [0, 0, 1]]"}, "which is singular: it maps the whole sensor onto a"),
    (
        {"rig.registration": "{ matrix = [[0, 0, 0], [0, 0, 0], [0, 0, 0]] }"},
        "registration.matrix: .*, which is singular",
    ),
    ({"rig.registration": '{ event_lens = "lens.yml" }'}, "registration.event_lens: .*lens.yml does not exist"),
    ({"events.qqqq": "3"}, "is not a known key; known here: source, columns, time_unit, size, cover"),
]


@pytest.mark.parametrize(("changes", "message"), WRONG, ids=[" ".join(changes) for changes, _ in WRONG])
def test_a_wrong_value_says_where_what_and_what_to_write(write_job, changes: dict, message: str) -> None:
    if "output" in changes:
        changes = {**changes, "output.folder": None}
    told = mistakes_of(write_job(changes))
    assert len(told) == 1, told
    assert re.search(message, told[0]), told[0]


def test_a_broken_toml_file_is_refused_with_its_line(write_job) -> None:
    with pytest.raises(JobError, match=r"job\.toml: is not valid TOML: .*line 2"):
        read_job(write_job(text="title = 'x'\nframes = \n"))


def test_a_path_with_backslashes_is_told_how_to_be_written(write_job) -> None:
    with pytest.raises(JobError, match="Write / for .* in paths"):
        read_job(write_job(text='[frames]\nsource = "D:\\wheel\\frames"\n'))


def test_a_file_that_is_not_there_or_not_text_is_refused(tmp_path: Path) -> None:
    with pytest.raises(JobError, match="there is no such job file; check the name"):
        read_job(tmp_path / "none.toml")
    (tmp_path / "bytes.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(JobError, match="is not UTF-8 text"):
        read_job(tmp_path / "bytes.toml")
    with pytest.raises(JobError, match="cannot be read"):
        read_job(tmp_path)


ODD_VALUES = [
    "1",
    "-1",
    "1e400",
    "true",
    '""',
    '"x"',
    "[]",
    "{}",
    "[[1]]",
    "[{}]",
    "2026-01-01",
    '"\\u0000"',
    '["1 s", 3]',
]


def mistakes_or_none(path: Path) -> list[str]:
    try:
        read_job(path)
    except JobError as error:
        return list(error.mistakes)
    return []


@pytest.mark.parametrize("odd", ODD_VALUES)
def test_whatever_stands_at_a_key_the_answer_is_settings_or_its_mistake_in_our_words(
    write_job, tmp_path: Path, odd: str
) -> None:
    (tmp_path / "rig.toml").touch()
    lines = EVERY_KEY.splitlines()
    for number, line in enumerate(lines):
        if "=" not in line:
            continue
        key = line.partition("=")[0]
        told = mistakes_or_none(write_job(text="\n".join([*lines[:number], f"{key}= {odd}", *lines[number + 1 :]])))
        assert not told or any(f"line {number + 1}: " in mistake for mistake in told), (line, odd, told)
        assert "nput should" not in "".join(told)  # the validator's own words
