"""Bad and odd inputs: a table of cases, each with the right answer or the message it must get.

`cases` holds the table, `running` runs one case through the real commands, `page` writes it for
people; `python -m tests.hard_inputs --report reports/hard-inputs.md`.
"""
