"""Files of a history: for each unit a Parquet file and its CSV twin, and the sealed truth apart from them.

Columns of a unit's files: ``time`` (UTC), every tag in the plant's unit with the digits its sender shows, the
quality of every tag as a number (0 good, 1 uncertain, 2 bad), and ``simulated``, always true. Minutes are
written chunk by chunk, so that memory does not grow with the days.
"""

import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Final, Self

import numpy as np

from agent.siteplan.plan import Input, UnitPlan
from simulator.gas_data import Floats
from simulator.instruments import RESOLUTION

QUALITY: Final = ".quality"
TRUTH: Final = "truth"
_MARK: Final = "SIMULATED: an invented plant; no value here was measured"


class HistoryFileError(Exception):
    """The files cannot be written; the message says why in one sentence."""


def need_arrow() -> None:
    """Say clearly that the library for Parquet is missing.

    Raises
    ------
    HistoryFileError
        It is missing.
    """
    try:
        import pyarrow as pa  # noqa: PLC0415, F401 - an extra
    except ImportError:
        message = "a history needs the package pyarrow: install throwline with the extra 'history'"
        raise HistoryFileError(message) from None


class UnitFiles:
    """The three files of one unit, open for writing.

    Parameters
    ----------
    folder : Path
        Where the unit's own files go; the truth goes into a folder of its own in it.
    plan : UnitPlan
        The unit and its tags.
    about : Mapping[str, str]
        What the files say of themselves: site, seed, scenario, digest of the plant.
    """

    def __init__(self, folder: Path, plan: UnitPlan, about: Mapping[str, str]) -> None:
        import pyarrow as pa  # noqa: PLC0415 - an extra, loaded when a history is written
        import pyarrow.csv as pc  # noqa: PLC0415
        import pyarrow.parquet as pq  # noqa: PLC0415

        self._pa, self._pq = pa, pq
        self._plan = plan
        self._about = {"throwline": _MARK, "unit": plan.id, **about}
        self._folder = folder
        (folder / TRUTH).mkdir(parents=True, exist_ok=True)
        self._schema = self._tag_schema()
        self._parquet = pq.ParquetWriter(folder / f"{plan.id}.parquet", self._schema, compression="zstd")
        self._csv_schema = self._decimals(self._schema)
        self._csv = pc.CSVWriter(folder / f"{plan.id}.csv", self._csv_schema)
        self._truth: pq.ParquetWriter | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._parquet.close()
        self._csv.close()
        if self._truth is not None:
            self._truth.close()

    def write(
        self, time: Floats, shown: Mapping[str, Sequence[object] | Floats], quality: Mapping[str, Floats]
    ) -> None:
        """The next minutes; values by tag, NaN where the sender gives none."""
        pa = self._pa
        columns: list[Any] = [_times(pa, time)]
        for tag in self._plan.inputs:
            columns.append(_values(pa, tag, shown[tag.tag]))
            columns.append(pa.array(quality[tag.tag], type=pa.uint8()))
        columns.append(pa.array(np.ones(len(time), dtype=np.bool_)))
        table = pa.table(columns, schema=self._schema)
        self._parquet.write_table(table)
        self._csv.write_table(table.cast(self._csv_schema))

    def write_truth(self, time: Floats, values: Mapping[str, Floats | Sequence[str]]) -> None:
        """What really was, in SI, for the same minutes."""
        pa = self._pa
        arrays = {"time": _times(pa, time)}
        for name, row in values.items():
            kind = _kind_of(pa, row) if isinstance(row, np.ndarray) else pa.string()
            arrays[name] = pa.array(row, type=kind)
        table = pa.table(arrays).replace_schema_metadata(self._about)
        if self._truth is None:
            path = self._folder / TRUTH / f"{self._plan.id}.parquet"
            self._truth = self._pq.ParquetWriter(path, table.schema, compression="zstd")
        self._truth.write_table(table)

    def _tag_schema(self) -> Any:
        pa = self._pa
        found = [pa.field("time", pa.timestamp("s", tz="UTC"), nullable=False)]
        for tag in self._plan.inputs:
            about = {"quantity": tag.quantity, "of": tag.name.split(".")[0], "unit": tag.unit, "tap": tag.tap}
            kind = {"load_step": pa.string(), "run_signal": pa.bool_()}.get(tag.quantity, pa.float64())
            found.append(pa.field(tag.tag, kind, metadata=about))
            found.append(pa.field(tag.tag + QUALITY, pa.uint8(), nullable=False))
        found.append(pa.field("simulated", pa.bool_(), nullable=False))
        return pa.schema(found, metadata=self._about)

    def _decimals(self, schema: Any) -> Any:
        """The same with as many digits as each sender shows."""
        pa = self._pa
        units = {tag.tag: tag.unit for tag in self._plan.inputs}
        fields = []
        for field in schema:
            step = RESOLUTION.get(units.get(field.name, ""))
            if field.type == pa.float64() and step is not None:
                fields.append(field.with_type(pa.decimal128(18, digits(step))))
            else:
                fields.append(field)
        return pa.schema(fields)


def digits(step: float) -> int:
    """Decimals of a resolution."""
    return max(0, -math.floor(math.log10(step)))


def rounded_row(values: Floats, unit: str) -> Floats:
    """`instruments.rounded` for a row."""
    step = RESOLUTION.get(unit)
    if step is None:
        return values
    return np.asarray(np.round(np.round(values / step) * step, digits(step)) + 0.0)  # no minus zero


def write_about(folder: Path, about: Mapping[str, object], truth: Mapping[str, object]) -> None:
    """The words beside the files; what must stay sealed goes to the truth."""
    for path, content in ((folder / "history.json", about), (folder / TRUTH / "history.json", truth)):
        path.write_text(json.dumps({"throwline": _MARK, **content}, indent=1) + "\n", encoding="utf-8")


def _times(pa: Any, time: Floats) -> Any:
    seconds = np.round(time).astype(np.int64)
    return pa.array(seconds, type=pa.timestamp("s", tz="UTC"))


def _values(pa: Any, tag: Input, row: Sequence[object] | Floats) -> Any:
    if tag.quantity == "load_step":
        return pa.array(row, type=pa.string())
    values = np.asarray(row, dtype=float)
    none = ~np.isfinite(values)
    if tag.quantity == "run_signal":
        return pa.array(values > 0.5, type=pa.bool_(), mask=none)
    return pa.array(values, type=pa.float64(), mask=none)


def _kind_of(pa: Any, row: Floats) -> Any:
    if row.dtype == np.bool_:
        return pa.bool_()
    return pa.float32()
