"""What a designer states: briefs, technologies, parts, quantities, and what is wrong with them."""
