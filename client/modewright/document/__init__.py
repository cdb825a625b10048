"""Problem documents: their files, their checks, and their translation into the contract's messages.

parse: a dictionary becomes a :class:`modewright.problem.Problem`. write: the way back.
files: JSON, TOML and YAML files, and files of samples. messages: problems to and from protobuf messages.
``problem.schema.json`` is the same grammar as a JSON Schema (draft 2020-12), for editors and other programs.
"""
