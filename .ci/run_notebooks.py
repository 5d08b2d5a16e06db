"""Execute notebooks from start to end in throw-away folders; any error in a cell fails."""

import argparse
import os
import pathlib
import sys
import tempfile
import time

import nbformat
from nbclient import NotebookClient

LIMIT_SECONDS = 120
LIMIT_BYTES = 1 << 20


# A backend chosen outside would keep the pictures out of the pages.
os.environ.pop("MPLBACKEND", None)


def run(path, write):
    notebook = nbformat.read(path, as_version=4)
    with tempfile.TemporaryDirectory() as folder:
        client = NotebookClient(
            notebook,
            timeout=LIMIT_SECONDS,
            kernel_name="python3",
            coalesce_streams=True,
            resources={"metadata": {"path": folder}},
        )
        started = time.monotonic()
        client.execute()
    seconds = time.monotonic() - started
    # Widget state and timings change from run to run and say nothing to a reader.
    notebook.metadata.pop("widgets", None)
    for cell in notebook.cells:
        cell.metadata.pop("execution", None)
    size = len(nbformat.writes(notebook))
    print(f"{path}: {seconds:.1f} s, {size / 1024:.0f} KiB with outputs", flush=True)
    if size > LIMIT_BYTES:
        sys.exit(f"{path}: outputs take more than {LIMIT_BYTES} bytes")
    if write:
        nbformat.write(notebook, path)


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("notebooks", nargs="+", type=pathlib.Path)
    parser.add_argument("--write", action="store_true", help="store the outputs in the notebook")
    options = parser.parse_args()
    for path in options.notebooks:
        run(path, options.write)


if __name__ == "__main__":
    main()
