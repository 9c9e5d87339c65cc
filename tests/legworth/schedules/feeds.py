"""A small GTFS feed of an invented carrier with everything odd that feeds may hold, and ways to spoil it."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping
from pathlib import Path

FEED = {
    "agency.txt": """\
agency_id,agency_name,agency_url,agency_timezone
SK,Sternkap Lines,https://sternkap.example,Europe/Berlin
""",
    "stops.txt": """\
stop_id,stop_name,stop_lat,stop_lon,location_type,parent_station,stop_timezone
HB,Hainburg,50.5,8.5,1,,
HB 1,Hainburg platform 1,50.5,8.5,0,HB,
HB 2,Hainburg platform 2,50.5,8.5,0,HB,
HB1n,Boarding area north,,,4,HB 1,
NO,Nordende,54.0,9.5,,,
MI,Mittweg,52.0,9.0,0,,
PA,Passing loop,53.0,9.2,0,,
IS,Insel Kap,55.0,2.0,0,,Europe/London
""",
    "routes.txt": """\
route_id,agency_id,route_short_name,route_type
R1,SK,Line 1,2
F1,SK,Ferry,1200
C1,SK,Coach,200
""",
    "trips.txt": """\
route_id,service_id,trip_id,block_id,trip_headsign
R1,DAILY,up 1,B1,north
R1,DAILY,down1,B1,south
R1,SUN,night,,late
F1,DAILY,boat,,
C1,WEEK,shuttle,,
""",
    "stop_times.txt": """\
trip_id,arrival_time,departure_time,stop_id,stop_sequence,pickup_type,drop_off_type,timepoint
up 1,8:00:00,8:00:00,HB 1,1,0,1,1
up 1,9:00:00,9:02:00,MI,5,0,0,1
up 1,,,PA,7,,,0
up 1,9:30:00,9:31:00,PA,8,1,1,1
up 1,10:00:00,10:00:00,NO,10,1,0,1
down1,12:00:00,12:00:00,HB 2,30,1,,
down1,10:30:00,10:30:00,NO,10,,1,
down1,11:25:00,11:30:00,MI,20,3,2,
night,23:10:00,23:10:00,NO,1,,,
night,24:10:00,24:15:00,MI,2,1,0,
night,25:20:00,25:20:00,HB 1,3,,,
night,25:25:00,25:30:00,HB 2,4,,,
night,26:30:00,26:30:00,MI,5,,,
boat,13:00:00,13:00:00,NO,1,,,
boat,19:00:00,19:00:00,IS,2,,,
shuttle,6:00:00,6:00:00,HB1n,1,,,
shuttle,6:40:00,6:40:00,MI,2,,,
""",
    "calendar.txt": """\
service_id,monday,tuesday,wednesday,thursday,friday,saturday,sunday,start_date,end_date
DAILY,1,1,1,1,1,1,1,20270301,20271231
WEEK,1,1,1,1,1,0,0,20270301,20270430
""",
    "calendar_dates.txt": """\
service_id,date,exception_type
DAILY,20270326,2
WEEK,20270328,1
SUN,20270327,1
SUN,20270328,1
SUN,20271031,1
""",
    "frequencies.txt": """\
trip_id,start_time,end_time,headway_secs,exact_times
shuttle,7:00:00,8:30:00,1800,1
shuttle,16:10:30,16:30:00,3600,0
""",
    "transfers.txt": """\
from_stop_id,to_stop_id,transfer_type,min_transfer_time
HB 1,HB 2,2,250
HB 2,HB 1,2,600
HB 1,HB 1,0,
MI,NO,2,900
""",
    "shapes.txt": "shape_id,shape_pt_lat,shape_pt_lon,shape_pt_sequence\nX,1,1,1\n",
}
SEATS = {"R1": 400, "1200": 90, "shuttle": 45, "*": 50}


def feed(**changes: str | None) -> dict[str, str]:
    """The feed with other tables, named without their ending; None leaves one out."""
    files = dict(FEED)
    for name, text in changes.items():
        if text is None:
            del files[f"{name}.txt"]
        else:
            files[f"{name}.txt"] = text
    return files


def replaced(file: str, old: str, new: str) -> dict[str, str]:
    """The feed with a passage, that stands exactly once, replaced."""
    text = FEED[f"{file}.txt"]
    assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {file}.txt"
    return feed(**{file: text.replace(old, new)})


def as_folder(files: Mapping[str, str | bytes], path: Path) -> Path:
    """Write a feed as a folder."""
    path.mkdir(parents=True, exist_ok=True)
    for name, content in files.items():
        (path / name).write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def as_zip(files: Mapping[str, str | bytes], path: Path) -> Path:
    """Write a feed as a zip file."""
    path.write_bytes(zipped(files))
    return path


def zipped(files: Mapping[str, str | bytes]) -> bytes:
    """A feed as the content of a zip file."""
    content = io.BytesIO()
    with zipfile.ZipFile(content, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, text in files.items():
            archive.writestr(name, text)
    return content.getvalue()
