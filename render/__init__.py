"""How it sounds, and what people touch: engine, audio files, takes, commands."""
