"""The command line: one command a module, loaded when it is called.

| module | what it is |
|---|---|
| entry | `pipeline-filters`: arguments, exit codes, refusals for people |
| check, forecast, filter, demo | the commands |
| wording | records in short sentences |
| progress | a bar on a terminal, plain lines elsewhere |
"""
