"""Real ground: lossy soil, layers of it, and a bonded wire mesh lying on it."""

from __future__ import annotations
