"""The page: seven questions from top to bottom. Started by `pkcalc form`."""

from __future__ import annotations

from pkcalc_form.consultation import page

page()
