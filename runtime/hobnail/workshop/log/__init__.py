"""Explaining afterwards: from what the service recorded to the story of what went wrong.

    places    where a record may lie
    reading   files -> whole lines and rows, and what is missing of them
    runs      lines and rows put together, one life of the service each
    story     a run told as entries in the order of time, repeated ones folded
    incident  the last time that something went wrong, and what is shown of it
    sheet     the ticks as a table for a spreadsheet

Only reads: a service that runs meanwhile does not notice.
"""
