"""Tables and sidecars in, observations out; the only room that converts units."""

from screener.intake.catalogue import (
    StarRows,
    is_catalogue_table,
    read_catalogue_table,
    read_star,
)

__all__ = ["StarRows", "is_catalogue_table", "read_catalogue_table", "read_star"]
