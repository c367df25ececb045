"""What kind of matrix it is, and how it is brought to Hessenberg form."""

from __future__ import annotations

from schurbench.prepare.preparation import BALANCE_CHOICES, Preparation, prepare
from schurbench.prepare.profile import Profile, profile

__all__ = ["BALANCE_CHOICES", "Preparation", "Profile", "prepare", "profile"]
