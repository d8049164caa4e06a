"""Writes morph/flow/duct_constants.py anew: python tests/flow/remake_duct_constants.py (half a minute)."""

from pathlib import Path

import numpy as np

TARGET = Path(__file__).parents[2] / "morph" / "flow" / "duct_constants.py"

HEAD = '''"""Laminar factors of morph's sections on the knots of duct_table.py, each triple f Re, Nu_H1, Nu_T.

Made by tests/flow/remake_duct_constants.py from the finite elements of duct.py; a test solves them anew and compares.
One block of lines per angle.
"""

'''


def lines(table: np.ndarray) -> str:
    rows = []
    for block in table:
        for start in range(0, len(block), 5):
            rows.append("  ".join(" ".join(f"{value:.4f}" for value in triple) for triple in block[start : start + 5]))
    return "\n".join(rows)


def text(roofed: np.ndarray, arched: np.ndarray) -> str:
    parts = [HEAD]
    for name, table, note in (
        ("ROOFED", roofed, "(angles, ridges, 3) of roofed and auto sections."),
        ("ARCHED", arched, "(angles, sines, 3) of arched sections."),
    ):
        parts.append(f'{name} = """\n{lines(table)}\n"""\n"""{note}"""\n\n')
    return "".join(parts).rstrip() + "\n"


if __name__ == "__main__":
    if not TARGET.exists():
        TARGET.write_text(text(np.zeros((0, 0, 3)), np.zeros((0, 0, 3))), encoding="utf-8")
    from morph.flow.duct_table import make_duct_tables

    TARGET.write_text(text(*make_duct_tables()), encoding="utf-8")
