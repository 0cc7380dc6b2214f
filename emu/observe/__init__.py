"""What is measured: the flare table, and the campaign that draws times, kinds and errors."""
