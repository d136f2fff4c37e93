"""The command, called in this process."""

from fellwalk import cli


def inside(capsys, *arguments):
    """Exit status, standard output and standard error; quicker than a process of its own."""
    try:
        status = cli.main([str(argument) for argument in arguments])
    except SystemExit as stop:
        status = stop.code
    out, err = capsys.readouterr()
    assert "Traceback" not in err
    return status, out, err
