"""Tables of sites: what a user says about each site beside its trace."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

__all__ = ["labels_of", "site_rows", "some"]


def site_rows(table: Any) -> dict[str, dict[str, Any]]:
    """Bring a table of sites into one form.

    Parameters
    ----------
    table : pandas.DataFrame, mapping or sequence of mapping
        A frame with a column ``site`` (or the sites as its index); a mapping from site to a mapping of columns;
        a mapping from column to a sequence, ``site`` among them; or a sequence of rows with ``site``.

    Returns
    -------
    dict
        Site -> column -> entry, in the table's order.

    Raises
    ------
    ValueError
        If the table has none of these forms, names no sites, or names one twice.
    """
    rows = list(_rows(table))
    out: dict[str, dict[str, Any]] = {}
    for row in rows:
        if "site" not in row:
            raise ValueError(
                f"a row of the table has no 'site' (it has {', '.join(map(str, row))}); add that column."
            )
        name = str(row["site"])
        if name in out:
            raise ValueError(f"the table names site '{name}' twice; each site has one row.")
        out[name] = {str(k): v for k, v in row.items() if k != "site"}
    return out


def _rows(table: Any) -> Iterable[Mapping[str, Any]]:
    if hasattr(table, "to_dict") and hasattr(table, "columns"):
        frame = table if "site" in table.columns else table.rename_axis("site").reset_index()
        return list(frame.to_dict("records"))
    if isinstance(table, Mapping):
        if "site" in table:
            return _from_columns(table)
        if all(isinstance(row, Mapping) for row in table.values()):
            return [{**row, "site": name} for name, row in table.items()]
    elif isinstance(table, Iterable) and not isinstance(table, str):
        rows = list(table)
        if all(isinstance(row, Mapping) for row in rows):
            return rows
    raise ValueError(
        f"the table of sites is a {type(table).__name__} of no known form; give a DataFrame with a column 'site', a "
        "mapping from site to its columns, or a mapping of columns with 'site' among them."
    )


def _from_columns(table: Mapping[str, Any]) -> list[dict[str, Any]]:
    lengths = {str(name): len(column) for name, column in table.items()}
    if len(set(lengths.values())) > 1:
        raise ValueError(
            f"the columns of the table have different lengths ({lengths}); give one entry a site."
        )
    return [dict(zip(table, entries, strict=True)) for entries in zip(*table.values(), strict=True)]


def labels_of(
    sites: Iterable[str], rows: Mapping[str, Mapping[str, Any]], columns: Iterable[str]
) -> dict[str, dict[str, str]]:
    """Return the labels of each site as text.

    Raises
    ------
    ValueError
        If a site or one of its labels is missing.
    """
    wanted, out = tuple(columns), {}
    for site in sites:
        row = rows.get(site)
        if row is None:
            raise ValueError(
                f"site '{site}' has no row in the labels; they name {some(rows)}. Add it or drop the site."
            )
        for column in wanted:
            if column not in row or _is_missing(row[column]):
                raise ValueError(
                    f"site '{site}' has no '{column}' in its labels (its columns: {some(row)}); fill it in or drop "
                    "the site."
                )
        out[site] = {column: _text(row[column]) for column in wanted}
    return out


def _is_missing(entry: Any) -> bool:
    return entry is None or entry != entry or str(entry).strip() in ("", "nan", "<NA>")


def _text(entry: Any) -> str:
    return str(int(entry)) if isinstance(entry, float) and entry.is_integer() else str(entry)


def some(names: Iterable[object], most: int = 8) -> str:
    """List names, the first few if they are many."""
    texts = [str(n) for n in names]
    shown = ", ".join(texts[:most]) or "nothing"
    return f"{shown} and {len(texts) - most} more" if len(texts) > most else shown
