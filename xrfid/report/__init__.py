"""Showing a result: terminal table, JSON document, figures and the page to hand over."""
