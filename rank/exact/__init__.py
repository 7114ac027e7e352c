"""Exact circuits: steady states, impedance, start-up, decks, and finalists re-sized on them."""
