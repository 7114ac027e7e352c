"""Which converters are worth building: charge flow, sizing, ranking and the shortlist."""
