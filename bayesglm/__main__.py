"""``python -m bayesglm``: the program."""

from bayesglm.cli.main import run

if __name__ == "__main__":
    run()
