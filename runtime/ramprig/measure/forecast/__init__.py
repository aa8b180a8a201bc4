"""The forecast of a run: what it will do to motor, supply and disk, as far as the figures are known."""
