"""A contract for import-linter: what a part of the program may import, as a list of what is allowed.

A forbidden list lets every new library through; this one names all that may be used, beside the standard library.
"""

from __future__ import annotations

import sys
from typing import Any

from importlinter import Contract, ContractCheck, fields, output


class AllowedContract(Contract):
    """Modules at or below `source_modules` import only themselves, `allowed_modules` and the standard library.

    Fields: `source_modules`; `allowed_modules` (packages of ours or others; each allows what is below it);
    `except_modules` (modules at or below these are left out).
    """

    type_name = "allowed"

    source_modules = fields.SetField(subfield=fields.StringField())
    allowed_modules = fields.SetField(subfield=fields.StringField())
    except_modules = fields.SetField(subfield=fields.StringField(), required=False)

    def check(self, graph: Any, verbose: bool) -> ContractCheck:
        """Every direct import that nothing allows."""
        allowed = {*self.allowed_modules, *self.source_modules, *sys.stdlib_module_names}
        excepted = self.except_modules or set()
        found = []
        for module in sorted(graph.modules):
            if not _at_or_below(module, self.source_modules) or _at_or_below(module, excepted):
                continue
            for imported in sorted(graph.find_modules_directly_imported_by(module)):
                if not _at_or_below(imported, allowed):
                    found.append((module, imported))
        return ContractCheck(kept=not found, metadata={"found": found})

    def render_broken_contract(self, check: ContractCheck) -> None:
        """One line per import."""
        for module, imported in check.metadata["found"]:
            output.print_error(f"{module} may not import {imported}")


def _at_or_below(module: str, roots: Any) -> bool:
    return any(module == root or module.startswith(f"{root}.") for root in roots)
