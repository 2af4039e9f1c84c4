"""Many members of a population with different parameters, on any executor, streamed to a file."""

from .run import Thetas, ensemble
from .store import Ensemble, open_ensemble
from .summary import Summary

__all__ = ["Ensemble", "Summary", "Thetas", "ensemble", "open_ensemble"]
