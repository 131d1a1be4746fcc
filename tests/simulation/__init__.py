"""Sizes and coverages by simulation, and the page that shows them."""
