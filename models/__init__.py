"""What the parts and the circuit do: no audio, no screen, no files beyond TOML and CSV."""
