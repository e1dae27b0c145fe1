"""`cutbank assign`: each row's side and position, for use beside the data."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from study.commands.speaking import progress
from study.document import Study, load_study
from study.errors import BAD_STUDY, StudyError
from study.literal import clean
from study.saving import fill_whole
from study.table_source import interruptible

if TYPE_CHECKING:
    from study.assemble import Assigned

_FORMATS = {".csv": "FORMAT csv, HEADER true", ".parquet": "FORMAT parquet", ".pq": "FORMAT parquet"}
_CHUNK = 250_000  # rows handed to the database at a time


def assign_rows(study_path: Path, *, to: Path) -> int:
    """Write row, site, side, position, segment, used and reason for every row that the study reads.

    Raises
    ------
    StudyError
        When the study can't be read or the file not be written.
    """
    if to.suffix.lower() not in _FORMATS:
        raise StudyError(
            f"{clean(str(to))}: the file to write must end in .csv or .parquet.",
            "Choose such a name.",
            BAD_STUDY,
        )
    study = load_study(study_path)
    _refuse_inputs(study, to)
    from study.assemble import assemble  # numpy and DuckDB: not before the study file is known to be good

    with progress() as report:
        assigned = assemble(study, progress=report)
        report(f"Writing {clean(to.name)}")
        fill_whole(to, lambda temporary: _write(assigned, temporary, _FORMATS[to.suffix.lower()]))
    used = assigned.rows_read - sum(assigned.dropped.values())
    print(f"{clean(str(to))}: {assigned.rows_read:,} rows, {used:,} of them used.")
    print("It holds one line a row of the data: keep it where the data are.")
    return 0


def _refuse_inputs(study: Study, to: Path) -> None:
    for taken in (study.path, study.data_file):
        if to.resolve() == taken.resolve():
            raise StudyError(
                f"{clean(str(to))}: is a file that the study reads.",
                "Choose another name to write to.",
                BAD_STUDY,
            )


def _write(assigned: Assigned, path: Path, form: str) -> None:
    import duckdb

    # A connection of its own: it needs to write one file, which the readers' connections are never allowed to.
    with (
        interruptible(),
        duckdb.connect(
            ":memory:", config={"autoinstall_known_extensions": False, "temp_directory": ""}
        ) as database,
    ):
        database.execute(
            "CREATE TABLE assigned (row BIGINT, site VARCHAR, side VARCHAR, position DOUBLE, segment VARCHAR, "
            "used BOOLEAN, reason VARCHAR)"
        )
        for start in range(0, assigned.rows_read, _CHUNK):
            _insert(database, assigned, slice(start, start + _CHUNK))
        quoted_path = "'" + str(path).replace("'", "''") + "'"
        database.execute(f"COPY assigned TO {quoted_path} ({form}, USE_TMP_FILE false)")


def _insert(database: object, assigned: Assigned, part: slice) -> None:
    import duckdb
    import numpy as np

    assert isinstance(database, duckdb.DuckDBPyConnection)
    position, reason = assigned.position[part], assigned.reason[part]
    treated = assigned.above[part] == (assigned.treated == "above")
    side = np.where(
        np.isnan(position), 0, np.where(treated, 1, 2)
    )  # 0: a place that a list does not have, NULL
    site = np.zeros(len(position), dtype=np.int64) if assigned.site is None else assigned.site[part] + 1
    database.execute(
        "INSERT INTO assigned SELECT row, CASE WHEN site > 0 THEN list_extract($names, site) END, "
        "CASE WHEN side > 0 THEN list_extract(['treated', 'comparison'], side) END, "
        "nullif(position, CAST('nan' AS DOUBLE)), NULL, reason = 0, "
        "CASE WHEN reason > 0 THEN list_extract($reasons, reason + 1) END "
        "FROM (SELECT unnest($row::BIGINT[]) AS row, unnest($site::BIGINT[]) AS site, unnest($side::BIGINT[]) AS side, "
        "unnest($position::DOUBLE[]) AS position, unnest($reason::BIGINT[]) AS reason)",
        {
            "row": assigned.row[part],
            "site": site,
            "side": side,
            "position": position,
            "reason": reason,
            "names": list(assigned.site_names) or [""],
            "reasons": list(assigned.reasons),
        },
    )
