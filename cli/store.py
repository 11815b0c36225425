"""``midspread store``: the store of kept answers."""
import click
from pathlib import Path
from rich.text import Text
def store_lines(p: Path | None) -> list[Text]: return []
@click.command()
def store() -> None:
    """x"""
