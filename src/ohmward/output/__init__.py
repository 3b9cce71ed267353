"""Renders rows: tables that other programs read, and what a person sees."""
