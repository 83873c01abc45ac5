"""Make `ride.csv` from the cycling recording in the bokeh_sampledata 2026.1 wheel.

Run ``python make_ride.py WHEEL [OUT]``. OUT is by default `ride.csv` beside this file. Nothing is repaired: rows,
doubled and missing seconds stay as recorded, and a missing value stays an empty field. See README.md.

Frame: x east, y north, in metres from the first position; counter-clockwise positive.
"""

import csv
import gzip
import hashlib
import io
import math
import sys
import zipfile
from pathlib import Path

MEMBER = "bokeh_sampledata/_data/cycling.csv.gz"
SHA256 = "db885ae392cdb93d4e5c6e02296df894430e476960e0a2138acfcec82bb0c2ce"  # of MEMBER
DEGREES = 180.0 / 2**31  # one semicircle, the position unit of the FIT format
A = 6378137.0  # m, WGS-84 semi-major axis (NGA.STND.0036, table 3.1)
F = 1.0 / 298.257223563  # WGS-84 flattening (same table)
HEADER = f"""\
# Bicycle ride (most likely on a virtual road), one row per record, nothing repaired; made by make_ride.py, see README.md
# source: bokeh_sampledata 2026.1, {MEMBER}, licence CC0-1.0
# x east, y north, from the first position; time in s, x and y in m, speed in m/s; an empty field is a missing value
"""


def radii(lat: float) -> tuple[float, float]:
    """Return the WGS-84 radii of curvature (meridian, prime vertical), m, at latitude `lat`, rad.

    Snyder (1987), Map Projections: A Working Manual, USGS Professional Paper 1395, eqs 4-18 and 4-20.
    """
    e2 = F * (2.0 - F)
    w = 1.0 - e2 * math.sin(lat) ** 2
    return A * (1.0 - e2) / w**1.5, A / math.sqrt(w)


def seconds(text: str) -> int:
    """Return the seconds in a duration such as ``0 days 01:13:11``."""
    days, _, clock = text.split()
    hours, minutes, secs = clock.split(":")
    return ((int(days) * 24 + int(hours)) * 60 + int(minutes)) * 60 + int(secs)


def metres(field: str, start: int, scale: float) -> str:
    """Return the offset of `field` from `start`, both semicircles, in metres to the millimetre; empty stays empty."""
    return f"{(int(field) - start) * scale:.3f}" if field else ""


def ride(wheel: Path) -> str:
    """Return the whole text of `ride.csv`."""
    packed = zipfile.ZipFile(wheel).read(MEMBER)
    if (got := hashlib.sha256(packed).hexdigest()) != SHA256:
        raise SystemExit(f"sha256 of {MEMBER} is {got}, must be {SHA256}; use the wheel of bokeh_sampledata 2026.1")
    records = list(csv.DictReader(io.StringIO(gzip.decompress(packed).decode("ascii"))))
    first = next(r for r in records if r["position_lat"] and r["position_long"])
    lat, lon = int(first["position_lat"]), int(first["position_long"])
    phi, unit = math.radians(lat * DEGREES), math.radians(DEGREES)
    meridian, prime_vertical = radii(phi)
    east, north = unit * prime_vertical * math.cos(phi), unit * meridian  # m per semicircle
    lines = [
        f"{seconds(r['time'])},{metres(r['position_long'], lon, east)},{metres(r['position_lat'], lat, north)},{r['speed']}"
        for r in records
    ]
    return HEADER + "\n".join(["time_s,x_m,y_m,speed_mps", *lines, ""])


if __name__ == "__main__":
    if len(sys.argv) not in (2, 3):
        raise SystemExit("usage: python make_ride.py WHEEL [OUT]")
    out = Path(sys.argv[2]) if len(sys.argv) == 3 else Path(__file__).with_name("ride.csv")
    out.write_text(ride(Path(sys.argv[1])), encoding="ascii", newline="\n")
