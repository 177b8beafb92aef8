"""Where the tool may go, without time: corridors."""
