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
show, show_json
    Those facts as plain text, and for a program.
table
    Readings as rows, for a spreadsheet or a program.
times
    How long each channel took.
pairing, change_table
    Readings side by side, before and after: what changed, and whether the meters can tell.
comparing
    Two records side by side.
earlier
    The last record of the same unit and channel.
at_the_end
    The few lines that stand at the end of a walk.
folder
    Which records a folder holds.
"""
