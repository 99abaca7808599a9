"""What is made from records: verification, the readable summary, tables, names and listings.

Everything here works from journals alone and can be thrown away and made again.

Modules
-------
names
    The file name of a record: no serial number ever becomes a path.
verify
    Whether a record is whole: the chain of its lines, and what they say.
summary
    The facts of one walk, gathered from its events.
show
    Those facts as plain text.
table
    Readings as rows, for a spreadsheet or a program.
folder
    Which records a folder holds.
"""
