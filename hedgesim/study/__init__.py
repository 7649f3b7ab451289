"""What is computed over ledgers: distribution, breakdown, frequency law, price of risk and choice."""

from hedgesim.study.settings import Settings
from hedgesim.study.studies import Study, study

__all__ = ["Settings", "Study", "study"]
