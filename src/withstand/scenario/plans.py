"""From the planned study of a scenario to a study."""

from __future__ import annotations
