"""Public holidays of a country as a holidays table, for a fleet that names its country and has no table."""

from collections.abc import Iterable
from importlib.metadata import version

import holidays
import pandas as pd

from fleet.schema import table
from fleet.tables import stable


def public_days(country: str, subdivision: str | None, years: Iterable[int]) -> pd.DataFrame:
    """Rows of the holidays table for these years, in order of date, each with the library as its source."""
    found = holidays.country_holidays(country, subdiv=subdivision, years=list(years))
    source = f"holidays {version('holidays')}"
    rows = [(day, name, source) for day, name in sorted(found.items())]
    frame = pd.DataFrame(rows, columns=["date", "name", "source"])
    return stable(frame, table("fleet", "holidays"))
