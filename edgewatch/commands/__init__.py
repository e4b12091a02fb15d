"""The commands: one small module each; only these print."""
