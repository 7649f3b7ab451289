"""What a report says beside its figures, prepared by the caller as text, and the paths it explains."""

from collections.abc import Mapping
from dataclasses import dataclass, field

from hedgesim.engine.ledger import Ledger, Story

CAUTION = (
    "A model is not the market. Results are estimates with stated error. This is no investment advice: validate "
    "independently and follow the firm's own risk policy and local regulation."
)


@dataclass(frozen=True)
class OptionMark:
    """Where an option of an explained path stands on its price chart.

    Attributes
    ----------
    underlying : place in `Ledger.underlyings`
    strike : price
    expiry_years : calendar years from the inception
    """

    underlying: int
    strike: float
    expiry_years: float


@dataclass(frozen=True)
class RunFacts:
    """Facts of a run that no study computes.

    Attributes
    ----------
    title, experiment_name : the experiment's own title, and the short name of its file
    market_lines, book_lines, method_lines : sentences and table rows for the inputs page, a line each
    versions : package -> version
    seed : of the paths, None when none is drawn
    hashes : input -> hex digest; the key `experiment` stands in every footer
    currency : written before amounts, such as EUR
    stories : an ordinary and a bad path
    ledger : the run's ledger, for its totals
    cautions : what the reader must bear in mind, beside the standing caution
    marks : strikes and expiries by story, empty where unknown
    inceptions : label of each path of a replay, such as its date; empty otherwise
    """

    title: str
    market_lines: tuple[str, ...]
    book_lines: tuple[str, ...]
    method_lines: tuple[str, ...]
    versions: Mapping[str, str]
    seed: int | None
    hashes: Mapping[str, str]
    experiment_name: str
    currency: str
    stories: tuple[Story, Story]
    ledger: Ledger
    cautions: tuple[str, ...] = ()
    marks: tuple[tuple[OptionMark, ...], ...] = field(default=())
    inceptions: tuple[str, ...] = field(default=())

    @property
    def experiment_hash(self) -> str:
        """First twelve figures of the experiment's digest."""
        return self.hashes.get("experiment", next(iter(self.hashes.values()), ""))[:12]

    @property
    def replayed(self) -> bool:
        """Price history instead of a simulated source: the floor is unknown."""
        return self.ledger.engine == "replay"
