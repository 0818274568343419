"""Many fits side by side, whatever happens to single ones and whenever the run is cut short.

tasks, template
    What is to be fitted: job files, or a template with traces.
values
    The table of values, one row a trace.
journal, lock
    What is kept on the disk, and how it gets there whole.
workers, child
    Processes that may hang or die without costing more than the fit they were at.
records
    What is put down of each fit.
work
    One fit from job to folder, in whatever process.
run
    The batch itself.
table, outliers, query
    The table of everything, and questions to it.
"""
