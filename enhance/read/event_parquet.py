"""Events from Parquet, streamed in batches."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path

import numpy as np

from enhance.errors import EventsError, PackageError
from enhance.read.event_columns import NAMES, Raw, check_numbers, pick_columns

_BLOCK = 500_000


class ParquetEvents:
    """Four columns of a Parquet file.

    Parameters
    ----------
    path : Path
    columns : mapping, optional
        For any of t, x, y, p a column's name.

    Raises
    ------
    EventsError
        If the file is damaged, or its columns cannot be told.
    PackageError
        If pyarrow is not installed.
    """

    def __init__(self, path: Path, columns: Mapping[str, str] | None) -> None:
        try:
            import pyarrow
            import pyarrow.parquet
        except ImportError as error:
            raise PackageError(
                f'{path}: reading Parquet needs pyarrow. Install it with: pip install "enhance[parquet]"'
            ) from error
        self.path = path
        self._damage = (pyarrow.ArrowException, OSError)
        try:
            # Without buffering ahead: it would hold several row groups at once.
            self._file = pyarrow.parquet.ParquetFile(path, pre_buffer=False)
        except self._damage as error:
            raise self._damaged(error) from error
        schema = self._file.schema_arrow
        chosen = pick_columns(schema.names, columns, path)
        self._names = [chosen[key] for key in NAMES]
        check_numbers(path, {key: _dtype(schema.field(chosen[key]).type) for key in NAMES})
        self.count = self._file.metadata.num_rows

    def blocks(self) -> Iterator[Raw]:
        """Stream all rows, in file order.

        Raises
        ------
        EventsError
            If the file turns out to be damaged.
        """
        try:
            with self._file as file:
                for batch in file.iter_batches(batch_size=_BLOCK, columns=self._names, use_threads=False):
                    # An absent value becomes NaN, which the door counts and drops.
                    yield Raw(*(batch.column(name).to_numpy(zero_copy_only=False) for name in self._names))
        except EventsError:
            raise
        except self._damage as error:
            raise self._damaged(error) from error

    def _damaged(self, error: BaseException) -> EventsError:
        return EventsError(
            f"{self.path} cannot be read as Parquet: {error}. It may be damaged, cut short or still being written; "
            "copy it again or export it anew."
        )


def _dtype(kind: object) -> np.dtype:
    try:
        return np.dtype(kind.to_pandas_dtype())  # type: ignore[attr-defined]
    except (NotImplementedError, TypeError):
        return np.dtype(object)
