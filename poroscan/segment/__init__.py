"""Outline and pores."""
