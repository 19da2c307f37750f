"""`python -m sweeprig.job.schemas`: write the schema files anew after a change of the models."""

from sweeprig.job.schemas import FOLDER, generate

for name, text in generate().items():
    (FOLDER / name).write_text(text, encoding="utf-8", newline="\n")
