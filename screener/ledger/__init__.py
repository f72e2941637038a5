"""The record of decisions: an append-only chain of entries that shows every later change."""

from screener.ledger.chain import Reading, examine
from screener.ledger.changes import Change, Standing, standings
from screener.ledger.comparison import Difference, Match, compare
from screener.ledger.decisions import Request, departs_from_grade, record, signal_of
from screener.ledger.entry import DECISIONS, Entry
from screener.ledger.journal import Journal
from screener.ledger.place import Place, ReadVerdict, open_place
from screener.ledger.verify import Verification, verify

__all__ = [
    "Change",
    "DECISIONS",
    "Difference",
    "Entry",
    "Journal",
    "Match",
    "Place",
    "ReadVerdict",
    "Reading",
    "Request",
    "Standing",
    "Verification",
    "compare",
    "departs_from_grade",
    "examine",
    "open_place",
    "record",
    "signal_of",
    "standings",
    "verify",
]
