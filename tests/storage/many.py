"""Invented tests in any number, written by one statement for each table."""

from sqlalchemy import Engine, text

from service.storage.engine import WRITES, is_sqlite

MOMENTS = {
    True: "strftime('%Y-%m-%dT%H:%M:%f000Z', '2031-01-01', '+' || (i * 60) || ' seconds')",
    False: "timestamptz '2031-01-01 00:00Z' + i * interval '1 minute'",
}
PLANS, LINES = 200, 20


def fill(engine: Engine, tests: int) -> None:
    """
    Register tests `lot-1000000` and on, one a minute.

    One in twenty was rejected, one in ten goes on; one in fifty is an experiment; each of the plans has as many as any
    other, in turn; two labels each, one of them of twenty values. Subjects come twice.
    """
    moment = MOMENTS[is_sqlite(engine)]
    counting = "WITH RECURSIVE n(i) AS (SELECT 0 UNION ALL SELECT i + 1 FROM n WHERE i + 1 < :count) "
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        connection.execute(
            text(
                "INSERT INTO plans (name, document, fingerprint, created_at, created_by) "
                + counting
                + f"SELECT 'plan-' || i, '{{}}', 'f', {moment}, 'me' FROM n"
            ),
            {"count": PLANS},
        )
        connection.execute(
            text(
                "INSERT INTO tests (key, plan, subject_kind, subject_name, labels, status, version, registered_at, "
                "registered_by, updated_at, sequence, sample_number, exposure, exposure_low, total, total_low, "
                "log_likelihood_ratio, decision, overrun, change) "
                + counting
                + f"SELECT 'lot-' || (1000000 + i), 'plan-' || (i % {PLANS}), "
                "CASE WHEN i % 50 = 7 THEN 'experiment' ELSE 'lot' END, 'subject-' || (i / 2), '{}', 'open', 1, "
                f"{moment}, 'me', {moment}, 0, 0, 0, 0, 0, 0, 0, "
                "CASE WHEN i % 20 = 3 THEN 'reject' WHEN i % 10 = 5 THEN 'continue' ELSE 'accept' END, 0, i + 1 FROM n"
            ),
            {"count": tests},
        )
        for name, value in (("line", f"i % {LINES}"), ("shift", "i % 3")):
            connection.execute(
                text(
                    "INSERT INTO test_labels (test, name, value) "
                    + counting
                    + f"SELECT 'lot-' || (1000000 + i), '{name}', '' || ({value}) FROM n"
                ),
                {"count": tests},
            )
    with engine.connect().execution_options(isolation_level="AUTOCOMMIT") as connection:
        connection.exec_driver_sql("ANALYZE" if is_sqlite(engine) else "VACUUM ANALYZE")
