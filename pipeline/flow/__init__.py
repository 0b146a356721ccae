"""The stages in order: the only place that knows the order. No number is made here."""

from pipeline.flow.commands import check, deal, deal_page, power, run
from pipeline.flow.contrasted import contrast

__all__ = ["check", "contrast", "deal", "deal_page", "power", "run"]
