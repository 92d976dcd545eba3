"""A benchmark of honesty: simulated spectra whose truth is known and whose physics is not the product's.

``python -m tests.benchmarks.honesty.run OUT --n 60 --seed 1`` draws spectra, has them identified and
prints how often elements were found, invented, and how far the stated uncertainties can be believed.

    tables.py      numbers of its own where the data set is known to be wrong, each with its source
    atomic.py      cross sections, vacancies and lines (Chantler and Elam tables)
    nature.py      how far nature may differ from any table: shares and energies, drawn per case
    tube.py        what leaves the tube
    sample.py      fluorescence with secondary enhancement, and scatter
    detector.py    response, escape, pile-up, energy scale
    materials.toml invented samples
    instrument.py  draws an instrument and what its file says of it
    generator.py   one case from all of these; writes spectrum, instrument file and truth
    truth.py       what a perfect analyst could know at best (Cramer-Rao)
    score.py       verdicts against truth
    run.py         the command;  figure.py its plot

Nothing here imports the product except `run.py`: cross sections, yields, line tables and detector model
of the two sides stay independent.
"""
