"""frames.shutter and frames.row_time in the job file."""

import re

import pytest

from enhance.batch import read_job
from enhance.errors import JobError


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({}, 0.0),
        ({"frames.shutter": '"global"'}, 0.0),
        ({"frames.shutter": '"rolling"', "frames.row_time": '"14.8 us"'}, 14.8),
        ({"frames.shutter": '"rolling"', "frames.row_time": '"-9800 ns"'}, -9.8),
        ({"frames.shutter": '"rolling"', "frames.row_time": '"estimate"'}, None),
        ({"frames.shutter": '"rolling"'}, None),
    ],
)
def test_the_row_time_is_read_exactly_or_left_to_be_estimated(write_job, changes, expected):
    assert read_job(write_job(changes)).rig.row_time_us == expected


WRONG = [
    ({"frames.shutter": '"rolled"'}, r"frames.shutter.*found 'rolled'; expected \"global\" or \"rolling\""),
    ({"frames.row_time": '"14.8 us"'}, r"frames.row_time.*the shutter is global.*shutter = \"rolling\", or leave"),
    ({"frames.shutter": '"rolling"', "frames.row_time": "14.8"}, r"frames.row_time.*found 14.8; .*\"14.8 us\""),
    ({"frames.shutter": '"rolling"', "frames.row_time": '"14.8"'}, r"is not a time with its unit"),
    ({"frames.shutter": '"rolling"', "frames.row_time": '"0 us"'}, r"are a global shutter: write shutter = \"global\""),
    (
        {"frames.shutter": '"rolling"', "rig.registration": '"estimate"'},
        r"rig.registration.*another view than the frames' own does not go with a rolling shutter yet",
    ),
]


@pytest.mark.parametrize(("changes", "message"), WRONG, ids=[str(i) for i in range(len(WRONG))])
def test_a_wrong_shutter_is_named_with_what_to_write(write_job, changes, message):
    with pytest.raises(JobError) as raised:
        read_job(write_job(changes))
    assert len(raised.value.mistakes) == 1
    assert re.search(message, raised.value.mistakes[0]), raised.value.mistakes[0]
