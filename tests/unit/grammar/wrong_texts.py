"""The wrong texts of wrong_texts.txt and what is said about them, as text. Run as a module it writes the file anew."""

from __future__ import annotations

from pathlib import Path

from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText

FILE = Path(__file__).with_name("wrong_texts.txt")


def said(text: str) -> str:
    """All diagnostics of a text, in the form of the file."""
    _, diagnostics = parse(SourceText("<text>", text))
    return "\n".join(line for diagnostic in diagnostics for line in _lines(diagnostic))


def _lines(diagnostic: Diagnostic) -> list[str]:
    span = diagnostic.span
    marked = span.text.strip().splitlines()
    lines = [f"> {span.line}:{span.column} {diagnostic.code}: {diagnostic.headline}" + (f"  «{marked[0]}»" if marked else "")]
    lines += [f">     {label.span.line}:{label.span.column} {label.text}" for label in diagnostic.labels]
    if diagnostic.hint is not None:
        lines.append(f">     hint: {diagnostic.hint}")
    return lines


def head_and_samples() -> tuple[str, list[tuple[str, str]]]:
    """The file's head, and each sample's text with what the file says is said about it."""
    head, *blocks = FILE.read_text(encoding="utf-8").strip("\n").split("\n\n")
    samples = []
    for block in blocks:
        lines = block.split("\n")
        text = "\n".join(line for line in lines if not line.startswith(">"))
        samples.append((text, "\n".join(line for line in lines if line.startswith(">"))))
    return head, samples


if __name__ == "__main__":
    file_head, all_samples = head_and_samples()
    written = [file_head, *(f"{text}\n{said(text)}" for text, _ in all_samples)]
    FILE.write_text("\n\n".join(written) + "\n", encoding="utf-8")
