"""What was recorded: captures, channels, phases, simulated rigs, the sweep file."""
