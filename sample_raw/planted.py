"""What goes wrong on the way into the files: the list, kind by kind.

Belongs here: where and how large. Does not belong here: how it is done to a row (`faults.py`). A contract is named by
its place: 0 is the one with the most open interest on that session, 1 the next later one that trades, and so on.
"""

# market, session, place, power of ten the settle is multiplied by
DECIMAL_SETTLES = (
    ("NWHT", "2016-04-12", 0, 1), ("NWHT", "2023-02-14", 1, -1), ("NWHT", "2024-12-03", 0, -1),
    ("NOIL", "2017-06-13", 0, -1), ("NOIL", "2019-11-05", 2, 2), ("NGAS", "2018-03-20", 0, 1),
    ("NGAS", "2022-08-09", 3, -1), ("NCOP", "2016-10-18", 0, 2), ("NCOP", "2023-05-16", 1, -2),
    ("NEQX", "2017-09-19", 0, -1), ("NEQX", "2021-04-20", 1, 1), ("NKRN", "2018-07-10", 0, 1),
    ("NKRN", "2022-11-15", 0, -1), ("NCOC", "2015-10-13", 0, 1), ("NCOC", "2019-03-12", 1, -1),
    ("NVOL", "2016-05-10", 0, 1), ("NVOL", "2021-09-07", 0, -1), ("NBND", "2020-02-11", 0, 1),
)  # fmt: skip

# market, first session, place, sessions, power of ten all four prices are multiplied by
DECIMAL_BARS = (
    ("NWHT", "2017-07-11", 0, 1, 2), ("NOIL", "2021-03-16", 1, 1, 2), ("NGAS", "2016-09-20", 0, 1, 2),
    ("NKRN", "2023-08-15", 0, 1, 2), ("NCOC", "2022-05-17", 0, 1, 2), ("NVOL", "2019-02-12", 1, 1, 2),
    ("NCOP", "2018-06-12", 0, 1, -2), ("NCOP", "2021-08-10", 0, 3, -2),
)  # fmt: skip

# market, session, place, per cent by which the settle alone is off
SPIKES = (
    ("NWHT", "2015-09-15", 0, 6.5), ("NWHT", "2020-11-17", 1, -9.0), ("NOIL", "2016-11-15", 0, -5.0),
    ("NOIL", "2022-06-14", 0, 8.0), ("NGAS", "2017-02-14", 0, 12.0), ("NGAS", "2023-10-10", 2, -15.0),
    ("NGAS", "2024-11-12", 0, 9.0), ("NCOP", "2015-06-16", 0, 4.0), ("NCOP", "2019-08-20", 0, -6.5),
    ("NBND", "2016-07-12", 0, 4.0), ("NBND", "2018-10-16", 0, -5.0), ("NBND", "2023-03-14", 1, 4.5),
    ("NEQX", "2016-02-16", 0, -7.0), ("NEQX", "2019-05-14", 0, 5.0), ("NEQX", "2022-09-20", 1, 10.0),
    ("NKRN", "2017-05-16", 0, 4.0), ("NKRN", "2020-09-15", 1, -5.0), ("NCOC", "2017-10-17", 0, -8.0),
    ("NCOC", "2021-02-16", 0, 7.0), ("NVOL", "2018-08-14", 0, 15.0), ("NVOL", "2022-02-15", 1, -14.0),
)  # fmt: skip

# market, first unchanged session, place, sessions, whether the whole row stands still or the settle alone
STALE_RUNS = (
    ("NWHT", "2018-09-11", 1, 6, True), ("NOIL", "2018-02-06", 3, 5, True), ("NOIL", "2023-09-12", 1, 6, False),
    ("NGAS", "2019-09-10", 0, 5, True), ("NCOP", "2017-01-17", 0, 7, True), ("NBND", "2021-07-13", 1, 5, False),
    ("NEQX", "2015-10-13", 1, 6, True), ("NKRN", "2019-04-09", 0, 6, True), ("NCOC", "2020-03-17", 0, 5, True),
    ("NVOL", "2020-10-13", 1, 8, True),
)  # fmt: skip

# market, first missing session, place, sessions
MISSING_ROWS = (
    ("NWHT", "2016-11-08", 0, 1), ("NWHT", "2019-01-15", 0, 2), ("NOIL", "2015-08-11", 1, 1),
    ("NOIL", "2020-09-08", 0, 5), ("NGAS", "2021-05-11", 0, 1), ("NGAS", "2015-05-12", 2, 9),
    ("NCOP", "2022-07-12", 0, 1), ("NCOP", "2024-02-13", 0, 5), ("NBND", "2017-03-14", 0, 1),
    ("NBND", "2022-11-22", 0, 2), ("NEQX", "2023-05-09", 0, 1), ("NEQX", "2018-05-15", 1, 9),
    ("NKRN", "2016-08-16", 0, 1), ("NKRN", "2021-03-02", 0, 5), ("NCOC", "2018-10-16", 0, 1),
    ("NCOC", "2016-02-16", 0, 5), ("NVOL", "2017-11-07", 0, 1), ("NVOL", "2023-01-03", 0, 2),
)  # fmt: skip

# contract whose last rows never arrived, and how many
EARLY_ENDS = (("NOIL-2017-09", 2), ("NOIL-2022-04", 3))

# market, session of which nothing arrived
MISSING_SESSIONS = (("NCOP", "2019-04-16"), ("NOIL", "2022-12-13"), ("NKRN", "2020-08-11"), ("NVOL", "2021-06-15"))

# market, session, place
DUPLICATES = (
    ("NWHT", "2017-02-07", 1), ("NOIL", "2016-06-14", 0), ("NBND", "2019-09-10", 0), ("NEQX", "2020-01-14", 0),
    ("NCOC", "2021-09-14", 2), ("NVOL", "2022-08-09", 0),
)  # fmt: skip

# market, session, place, ticks by which one of two rows is off, whether that one is the later line
CONFLICTS = (
    ("NWHT", "2021-05-11", 0, 3, False), ("NGAS", "2020-07-14", 0, 210, True), ("NCOP", "2018-01-16", 0, -600, True),
    ("NEQX", "2019-02-12", 0, -7, False), ("NKRN", "2017-08-15", 0, 48, False), ("NCOC", "2022-10-11", 1, 131, True),
)  # fmt: skip

# market, session, place, ticks by which the first report is off; the next session's file has it right
RESTATED = (
    ("NEQX", "2016-06-07", 0, 9), ("NEQX", "2021-10-12", 0, -530), ("NKRN", "2018-11-13", 0, 31),
    ("NKRN", "2022-04-12", 1, -440), ("NEQX", "2024-04-16", 0, 14),
)  # fmt: skip

# path of a file that ends in the middle of its last number
TORN_FILES = ("grains/NWHT_2016_09.csv", "sessions/2017/2017-08-22.csv", "soft/NCOC.zip/NCOC_2019_07.csv")

# market, closed day, place: one contract has a row all the same, a copy of the session before
CLOSED_DAY_ROWS = (
    ("NCOP", "2017-05-01", 0), ("NOIL", "2018-12-25", 1), ("NWHT", "2021-07-17", 0), ("NGAS", "2020-06-12", 0),
    ("NKRN", "2023-04-10", 0),
)  # fmt: skip

# market, day its calendar calls closed on which it traded
TRADED_CLOSED_DAYS = (("NEQX", "2018-12-05"),)

# market, session, place: high and low changed places
SWAPPED_RANGES = (
    ("NWHT", "2018-02-13", 1), ("NOIL", "2021-11-09", 0), ("NGAS", "2016-03-15", 1), ("NCOP", "2020-10-20", 0),
    ("NBND", "2015-04-14", 0), ("NKRN", "2019-10-15", 0), ("NVOL", "2023-11-07", 0), ("NCOC", "2024-05-14", 0),
)  # fmt: skip

# market, session, place: settle reported as nought
ZERO_SETTLES = (
    ("NGAS", "2019-01-15", 1), ("NCOC", "2017-03-21", 0), ("NEQX", "2022-01-18", 0), ("NWHT", "2015-06-16", 1),
)  # fmt: skip

# market, session: open, high and low are noughts in the farthest contract that did not trade
ZERO_RANGES = (("NGAS", "2017-10-17"), ("NCOP", "2019-10-15"))

# market, session, place, field, characters of the true text and what stands in their place, the first time they occur
UNREADABLE = (
    ("NWHT", "2022-10-18", 0, "settle", "3", "E"), ("NOIL", "2019-03-12", 1, "settle", ",", ",,"),
    ("NGAS", "2023-04-11", 0, "low", ",", ",l"), ("NBND", "2019-05-14", 0, "settle", "'", "."),
    ("NCOP", "2016-04-12", 1, "volume", ",", ",x"), ("NVOL", "2018-03-06", 1, "day", "-03-06", "-30-06"),
    ("NCOC", "2020-09-15", 1, "positions", "", "EUR,"),
)  # fmt: skip

# market, session, place, sixteenths of a tick by which the settle is off
OFF_TICKS = (
    ("NWHT", "2019-07-16", 0, 8), ("NOIL", "2018-06-05", 0, 8), ("NCOC", "2023-03-14", 0, 8),
    ("NEQX", "2017-10-17", 0, 4), ("NVOL", "2016-11-08", 0, 8), ("NCOP", "2015-10-13", 0, 8),
)  # fmt: skip

# market, session, place: the row is dated one year later
WRONG_YEARS = (("NWHT", "2017-10-10", 0), ("NOIL", "2016-08-09", 0))

# market, session, place, ticks: inside the day's own range, so that only a person can know
SUBTLE = (("NCOP", "2021-11-09", 0, 5), ("NWHT", "2023-10-10", 0, -2))

# files that no layout claims
STRAY_FILES = {
    "notes/readme_desk.txt": (
        "Files of the Northmark exchange, as they come in.\n"
        "The volatility index was divided by ten on 2017-03-27; older rows were never rewritten.\n"
    ),
    "grains/positions_2021.csv": (
        "account,contract,lots\nA17,NWHT-2021-12,40\nA17,NWHT-2022-03,-40\nB02,NWHT-2021-12,15\n"
    ),
}
