"""Which converters exist: wiring, exact balance, families and the complete census."""
