"""Error bars of one survey: noise, draws, derivatives, numerical terms."""
