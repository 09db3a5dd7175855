"""One file per command."""
def main(argv=None): return 0
