"""`python -m checks.gates`: write the gates' page anew and print gates.toml with every default."""

from pathlib import Path

from checks.gates.page import gates_page, gates_toml

if __name__ == "__main__":
    Path(__file__).with_name("README.md").write_text(gates_page(), encoding="utf-8")
    print(gates_toml(), end="")
