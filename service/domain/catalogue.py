"""
Public-domain standard plans, ready to use.

Sources:
    MIL-HDBK-781A (1996), sequential plans I-D to VIII-D: rows of failures with the times, in units of the lower test
    mean life, up to which a failure rejects and at which the test accepts; as reproduced in GJB 899A.
    40 CFR Part 1068, Appendix A to Subpart E, Table A-2: cumulative failed tests that pass and fail, acceptable
    quality level 40 %.
    46 CFR 160.066-12: cumulative defects that accept and reject, a look after every 8 units, lots of up to 280.
"""

from dataclasses import dataclass

# An entry of each row: until which time this failure rejects, at which time so many failures accept.
Times = tuple[tuple[float | None, float | None], ...]
# An entry of each row: sample number, acceptance number, rejection number.
Numbers = tuple[tuple[int, int | None, int | None], ...]


@dataclass(frozen=True)
class TimedStandard:
    """Discrimination ratio and nominal risk (both the same) of a reliability plan, and its rows."""

    ratio: float
    risk: float
    rows: Times


@dataclass(frozen=True)
class CountedStandard:
    """
    An inspection plan.

    Attributes:
        title, source: What it is, and where it stands.
        h0, alpha: The quality level that the source names, and a round bound of the risk attained there.
        h1, beta: A quality of our choice at which the plan accepts at most about one in ten, and a round bound of that.
        rows: The table.
    """

    title: str
    source: str
    h0: float
    alpha: float
    h1: float
    beta: float
    rows: Numbers


RELIABILITY = {
    "I-D": TimedStandard(
        1.5,
        0.1,
        (
            (None, 6.95),
            (None, 8.17),
            (None, 9.38),
            (None, 10.6),
            (None, 11.8),
            (None, 13.03),
            (0.34, 14.25),
            (1.56, 15.46),
            (2.78, 16.69),
            (3.99, 17.9),
            (5.2, 19.11),
            (6.42, 20.33),
            (7.64, 21.54),
            (8.86, 22.76),
            (10.07, 23.98),
            (11.29, 25.19),
            (12.5, 26.41),
            (13.72, 27.62),
            (14.94, 28.84),
            (16.15, 30.06),
            (17.37, 31.27),
            (18.5, 32.49),
            (19.8, 33.7),
            (21.02, 34.92),
            (22.23, 36.13),
            (23.45, 37.35),
            (24.66, 38.57),
            (25.88, 39.78),
            (27.07, 41.0),
            (28.31, 42.22),
            (29.53, 43.43),
            (30.74, 44.65),
            (31.96, 45.86),
            (33.18, 47.08),
            (34.39, 48.3),
            (35.61, 49.5),
            (36.82, 49.5),
            (38.04, 49.5),
            (39.26, 49.5),
            (40.47, 49.5),
            (41.69, 49.5),
            (49.5, None),
        ),
    ),
    "II-D": TimedStandard(
        1.5,
        0.2,
        (
            (None, 4.19),
            (None, 5.4),
            (None, 6.62),
            (0.24, 7.83),
            (1.46, 9.05),
            (2.67, 10.26),
            (3.9, 11.49),
            (5.12, 12.71),
            (6.33, 13.92),
            (7.55, 15.14),
            (8.76, 16.35),
            (9.98, 17.57),
            (11.19, 18.73),
            (12.41, 19.99),
            (13.62, 21.21),
            (14.84, 21.9),
            (16.05, 21.9),
            (17.28, 21.9),
            (18.5, 21.9),
            (21.9, None),
        ),
    ),
    "III-D": TimedStandard(
        2.0,
        0.1,
        (
            (None, 4.4),
            (None, 5.79),
            (None, 7.18),
            (0.7, 8.56),
            (2.08, 9.94),
            (3.48, 11.34),
            (4.86, 12.72),
            (6.24, 14.1),
            (7.63, 15.49),
            (9.02, 16.88),
            (10.4, 18.26),
            (11.79, 19.65),
            (13.18, 20.6),
            (14.56, 20.6),
            (15.94, 20.6),
            (17.34, 20.6),
            (20.6, None),
        ),
    ),
    "IV-D": TimedStandard(
        2.0,
        0.2,
        (
            (None, 2.8),
            (None, 4.18),
            (0.7, 5.58),
            (2.08, 6.96),
            (3.46, 8.34),
            (4.86, 9.74),
            (6.24, 9.74),
            (7.62, 9.74),
            (9.74, None),
        ),
    ),
    "V-D": TimedStandard(
        3.0,
        0.1,
        (
            (None, 3.75),
            (None, 5.4),
            (0.57, 7.05),
            (2.22, 8.7),
            (3.87, 10.35),
            (5.52, 10.35),
            (7.17, 10.35),
            (10.35, None),
        ),
    ),
    "VI-D": TimedStandard(
        3.0,
        0.2,
        (
            (None, 2.67),
            (None, 4.32),
            (0.36, 4.5),
            (4.5, None),
        ),
    ),
    "VII-D": TimedStandard(
        1.5,
        0.3,
        (
            (None, 3.15),
            (None, 4.37),
            (None, 5.58),
            (1.22, 6.8),
            (2.43, 6.8),
            (3.65, 6.8),
            (6.8, None),
        ),
    ),
    "VIII-D": TimedStandard(
        2.0,
        0.3,
        (
            (None, 1.72),
            (None, 3.1),
            (None, 4.5),
            (4.5, None),
        ),
    ),
}

INSPECTION = {
    "40-CFR-1068/A-2-AA": CountedStandard(
        "Selective enforcement testing of engines, plan AA (up to 20 tests)",
        "40 CFR Part 1068, Appendix A to Subpart E, Table A-2",
        0.40,
        0.20,
        0.70,
        0.10,
        (
            (3, 0, None),
            (4, 0, None),
            (5, 1, 5),
            (6, 1, 6),
            (7, 2, 6),
            (8, 2, 7),
            (9, 3, 7),
            (10, 3, 8),
            (11, 4, 8),
            (12, 4, 9),
            (13, 5, 9),
            (14, 5, 10),
            (15, 6, 10),
            (16, 6, 10),
            (17, 7, 10),
            (18, 8, 10),
            (19, 8, 10),
            (20, 9, 10),
        ),
    ),
    "46-CFR-160.066-12/280": CountedStandard(
        "Visual distress signals, lots of up to 280",
        "46 CFR 160.066-12",
        0.065,
        0.05,
        0.25,
        0.15,
        ((8, None, 4), (16, 1, 5), (24, 2, 6), (32, 3, 7), (40, 5, 8), (48, 7, 9), (56, 9, 10)),
    ),
}
