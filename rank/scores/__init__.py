"""What the wiring alone says of a converter: charge flow, switches, utilisations, listings of all of them."""
