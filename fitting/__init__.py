"""From files to answers: importers, observables, inverse step, report, command line."""
