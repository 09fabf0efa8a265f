"""Which sigma level, shift, offset and sides a quoted capability stands for."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from allocator.capability import sigma_from_log_defects
from allocator.errors import RangeError
from allocator.scenario.model import Capability

