"""Runs the examples of a page of the documentation."""

import re


def run_examples(page):
    """Runs the Python examples of a page in order, in one namespace: (number of them, the namespace)."""
    examples = re.findall(r"```python\n(.*?)```", page.read_text(encoding="utf-8"), flags=re.DOTALL)
    names = {}
    for example in examples:
        exec(compile(example, str(page), "exec"), names)
    return len(examples), names
