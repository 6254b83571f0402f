"""Texts that stand for files; every observer, station and object in them is invented."""

from __future__ import annotations

import io

PSV = """\
# version=2022
# observatory
! mpcCode 704
# observers
! name A. Nobody
trkSub |mode|stn |obsTime                 |ra       |dec      |rmsRA|rmsDec|astCat
abc    |CCD |704 |2020-09-05T07:00:00.000Z|27.254933|+6.672039|0.3  |0.4   |Gaia2
abc    |CCD |704 |2020-09-05T07:30:00.000Z|27.255802|+6.672609|0.3  |0.4   |Gaia2
abc    |CCD |704 |2020-09-05T08:00:00.000Z|27.256621|+6.673171|0.3  |0.4   |Gaia2
"""

ROVING_HEAD = "trkSub|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|ra|dec|astCat"
ROVING = f"""\
# version=2022
{ROVING_HEAD}
sat|CCD|247|WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:24Z|282.6282|+10.6768|UNK
sat|CCD|247|WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:55Z|284.9178|+22.6863|UNK
sat|CCD|247|WGS84|399|-106.66|33.817|1510|2006-06-28T04:29:26Z|288.2282|+35.6333|UNK
"""

CSV = """\
time_utc,ra_deg,dec_deg,sigma_arcsec,station,object
2020-09-05T07:00:00Z,27.254933,6.672039,0.5,704,abc
2020-09-05T07:30:00Z,27.255802,6.672609,0.5,704,abc
2020-09-05T08:00:00Z,27.256621,6.673171,0.5,704,abc
"""


def file_of(text: str) -> io.StringIO:
    return io.StringIO(text)
