"""The stages in order: the only place that knows the order. No number is made here."""

from pipeline.flow.commands import check, deal, power, run

__all__ = ["check", "deal", "power", "run"]
