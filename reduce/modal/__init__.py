"""Stage 1: find the modes, count them, group them, rank them."""

from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import MEASURES, rank, share
from modesieve.reduce.modal.records import Certificate, Modes, Ranking

__all__ = ["MEASURES", "Certificate", "Modes", "Ranking", "find_modes", "rank", "share"]
