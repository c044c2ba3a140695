"""The corpora, each read in place into the same few types.

``labelled`` holds what every reader gives, ``truth`` makes truth and examples of it,
``derivations`` says what a label on a derivation tells of its two electrodes, ``readers``
is the table of all readers, ``backgrounds`` reads recordings to put artifact into,
``page_readings`` reads pages that were read twice, ``spans`` tells which seconds a span of
time touches. This file imports none of them: a reader needs ``labelled``, and would need
itself if it were read here.
"""
