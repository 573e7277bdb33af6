"""How lift and drag are spread along the span."""
