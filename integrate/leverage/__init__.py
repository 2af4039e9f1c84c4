"""Which published models, which initial masses and which parameters a population's yields rest on."""

from .ranking import BIRTH, Leverage, Profile, leverage

__all__ = ["BIRTH", "Leverage", "Profile", "leverage"]
