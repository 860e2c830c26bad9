"""Reading a run folder: what was asked, its cases and its curves."""

from __future__ import annotations

import json
from collections.abc import Collection, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

from modepair.circuits import candidates
from modepair.runner.errors import ReadingError
from modepair.runner.folder import RUN_FILE
from modepair.runner.sweep import Run
from modepair.sweeps import Opamp, SpecError, StageCircuit
from modepair.sweeps.reader import restore_spec

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt
    import pandas as pd

    from modepair.reports import ModePair
    from modepair.sweeps import Spec
    from modepair.sweeps.measured import Measurement

__all__ = ["curves_of", "nominal_pairs", "open_run", "read_record"]


def read_record(folder: str | Path) -> dict[str, Any]:
    """Read the record of a run.

    Parameters
    ----------
    folder : str or Path
        The run folder.

    Returns
    -------
    dict
        The content of `run.json`.

    Raises
    ------
    ReadingError
        If this is not a run folder, or its record cannot be read.
    """
    folder = Path(folder)
    path = folder / RUN_FILE
    if not folder.exists():
        raise ReadingError(f"{folder}: no such file or folder; a spec or a run folder is needed")
    if not folder.is_dir():
        raise ReadingError(f"{folder}: this is not a folder; a run folder is needed")
    if not path.is_file():
        raise ReadingError(
            f"{folder}: this is not a run folder, for it holds no {RUN_FILE}; "
            "modepair run SPEC -o DIR writes one"
        )
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise ReadingError(f"{path}: this is not the record of a run; run the spec again") from error
    needed = {"spec": str, "spec_file": str, "opamps": dict, "versions": dict, "started": str}
    if not isinstance(record, dict) or not all(isinstance(record.get(k), t) for k, t in needed.items()):
        raise ReadingError(
            f"{path}: this is not the record of a run; it must have {', '.join(needed)}. Run the spec again"
        )
    return record


def open_run(folder: str | Path) -> Run:
    """Open a run folder.

    Parameters
    ----------
    folder : str or Path
        The run folder.

    Returns
    -------
    Run
        As `modepair.runner.run` returned it.

    Raises
    ------
    ReadingError
        If this is not a whole run folder, or if its spec is of another version of modepair and cannot be read.
    """
    import pandas as pd

    folder = Path(folder)
    record = read_record(folder)
    for name in ("cases.csv", "curves.parquet"):
        if not (folder / name).is_file():
            raise ReadingError(
                f"{folder / name}: no such file; the run folder is not whole, run the spec again"
            )
    spec = _spec_of(record, folder)
    names = {axis.path: str for axis in spec.axes if not axis.numeric}
    try:
        # An op-amp may be called nan; only an empty field is no value.
        cases = pd.read_csv(
            folder / "cases.csv",
            dtype={**names, "state": str, "above_floor": str},
            keep_default_na=False,
            na_values=[""],
        )
    except (ValueError, OSError) as error:
        raise ReadingError(f"{folder / 'cases.csv'}: cannot be read: {error}; run the spec again") from error
    lacking = [path for path in ("case", "state", *(axis.path for axis in spec.axes)) if path not in cases]
    if lacking:
        raise ReadingError(f"{folder / 'cases.csv'}: has no column {lacking[0]}; run the spec again")
    if "above_floor" in cases:
        cases["above_floor"] = cases["above_floor"].fillna("")
    return Run(
        folder,
        spec.with_measurements(_measurements(folder, spec)),
        cases,
        _verdicts(folder),
        warnings=_warnings(record),
    )


def _warnings(record: dict[str, Any]) -> tuple[str, ...]:
    """What a run said of its op-amp models; one of an older version said nothing."""
    found = record.get("warnings", [])
    return tuple(str(text) for text in found) if isinstance(found, list) else ()


def _verdicts(folder: Path) -> pd.DataFrame:
    """Read back the verdicts of a run; no rows where nothing was judged."""
    import pandas as pd

    from modepair.runner.judging import no_verdicts

    path = folder / "verdicts.csv"
    if not path.is_file():
        return no_verdicts()
    try:
        table = pd.read_csv(path, keep_default_na=False, na_values=[""], dtype={"note": str, "unit": str})
    except (ValueError, OSError) as error:
        raise ReadingError(f"{path}: cannot be read: {error}; run the spec again") from error
    lacking = [name for name in no_verdicts().columns if name not in table]
    if lacking:
        raise ReadingError(f"{path}: has no column {lacking[0]}; run the spec again")
    return table.assign(note=table["note"].fillna(""))


def _spec_of(record: dict[str, Any], folder: Path) -> Spec:
    """Read the spec that a record keeps."""
    known = candidates()
    for name, values in record["opamps"].items():
        if not isinstance(values, dict) or not values.keys() <= Opamp.model_fields.keys():
            raise ReadingError(f"{folder / RUN_FILE}: opamps.{name} is no op-amp; run the spec again")
        # The values are SI already; they were checked when the spec was read.
        known[name] = Opamp.model_construct(**values)
    try:
        return restore_spec(record["spec"], record["spec_file"], known, circuit=_circuit(record, folder))
    except SpecError as error:
        raise ReadingError(
            f"{folder / RUN_FILE}: its spec cannot be read by this version of modepair; run the spec again\n{error}"
        ) from error


def _circuit(record: dict[str, Any], folder: Path) -> StageCircuit | None:
    """Read back the own circuit that a run was made of."""
    kept = record.get("circuit")
    if kept is None:
        return None
    try:
        ports, loose, opamps = (tuple(map(str, kept[name])) for name in ("ports", "loose", "opamps"))
        values = tuple((str(name), float(value)) for name, value in kept["values"].items())
        file, subcircuit, digest = (str(kept[name]) for name in ("file", "subcircuit", "digest"))
        return StageCircuit(file, subcircuit, ports, loose, opamps, values, digest)
    except (AttributeError, KeyError, TypeError, ValueError) as error:
        raise ReadingError(f"{folder / RUN_FILE}: circuit is no circuit; run the spec again") from error


def _measurements(folder: Path, spec: Spec) -> tuple[Measurement, ...]:
    """Read back the measurements that a run was given."""
    if not spec.measured:
        return ()
    import numpy as np
    import pandas as pd

    from modepair.sweeps.axes import settings
    from modepair.sweeps.measured import Measurement

    path = folder / "measured.csv"
    try:
        table = pd.read_csv(path, dtype={"measurement": str}, keep_default_na=False, na_values=[""])
        known = settings(spec.candidates, spec.vocabulary)
        found = []
        for entry in spec.measured:
            rows = table[table["measurement"] == entry.title]
            rows = rows[rows["case"] == rows["case"].min()]
            found.append(
                Measurement(
                    entry.title,
                    rows["frequency_hz"].to_numpy(np.float64),
                    rows["measured_db"].to_numpy(np.float64),
                    rows["residual_db"].fillna(np.inf).to_numpy(np.float64),
                    {axis: known[axis].parse(text) for axis, text in entry.case.items()},
                )
            )
        return tuple(found)
    except (OSError, ValueError, KeyError) as error:
        raise ReadingError(f"{path}: cannot be read; run the spec again") from error


def nominal_pairs(path: Path) -> Iterator[tuple[npt.NDArray[np.int64], ModePair]]:
    """Read the nominal curves of a run, a part of the file at a time.

    Parameters
    ----------
    path : Path
        `curves.parquet`.

    Yields
    ------
    case : ndarray of int, shape (n,)
        Case numbers.
    pair : ModePair
        Their gains, shape (n, F).

    Raises
    ------
    ReadingError
        If the file does not hold the curves of a run.
    """
    import pyarrow as pa

    from modepair.runner.judging import read_curves

    try:
        yield from read_curves(path)
    except (OSError, ValueError, KeyError, pa.ArrowException) as error:
        raise ReadingError(f"{path}: cannot be read: {error}; run the spec again") from error


def curves_of(path: Path, cases: Collection[int]) -> dict[int, ModePair]:
    """Read the nominal curves of some cases.

    Parameters
    ----------
    path : Path
        `curves.parquet`.
    cases : collection of int
        Numbers of the cases.

    Returns
    -------
    dict of int to ModePair
        Gains by case, each of shape (F,); a case that failed is missing.

    Raises
    ------
    ReadingError
        As `nominal_pairs`.
    """
    from modepair.reports import ModePair

    wanted = set(cases)
    found = {}
    for case, pair in nominal_pairs(path) if wanted else ():
        for row, number in enumerate(case.tolist()):
            if number in wanted:
                found[number] = ModePair(
                    pair.frequency_hz, pair.common_gain[row], pair.differential_gain[row]
                )
    return found
