"""From checked tables to arrays: the one gate through which orders reach the model.

Labels, units, currencies and time zones stop here.
"""

from scheduler.intake.book import DEFAULT_URGENCY, Book, take_in
from scheduler.intake.clocks import Finish
from scheduler.intake.market import market_arrays

__all__ = ["DEFAULT_URGENCY", "Book", "Finish", "market_arrays", "take_in"]
