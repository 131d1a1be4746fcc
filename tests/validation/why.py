"""Why a world falls short of an aim: (aim, part of its name, why)."""

from __future__ import annotations

REASONS: tuple[tuple[str, str, str], ...] = ()
