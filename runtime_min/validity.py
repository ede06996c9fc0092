"""What must be true of a trained and of a sealed model, beyond the types of their fields.

Each function returns every problem as (place, what was found, what to do).
"""

from runtime_min.device_numbers import device_numbers
from runtime_min.validity_sealed import sealed_problems
from runtime_min.validity_trained import trained_problems

__all__ = ["device_numbers", "sealed_problems", "trained_problems"]
