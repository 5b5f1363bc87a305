"""Hostile inputs: what makes them (``mutate``), what they are given to (``targets``), and a long run (``run``).

``tests/test_fuzz.py`` gives a few hundred of them to every target with hypothesis, which makes a failure small;
``python -m tests.fuzz.run`` gives a hundred thousand, guided by coverage where atheris is installed (``pip install
".[fuzz]"``). Both use the same targets and the same mutators.
"""
