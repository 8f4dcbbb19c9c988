"""placeholder"""
from dataclasses import dataclass
@dataclass(frozen=True, slots=True)
class Replayed:
    standings: tuple
    memories: tuple
    events: tuple
