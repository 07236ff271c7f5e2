"""``python -m mwdlink`` is the same as ``mwdlink``."""

from mwdlink.cli.main import run

if __name__ == "__main__":
    run()
