"""From raw points to rows: one pure function of data, settings and errors, and its way back."""
