"""From LLVM's text to callable machine code."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from vliwsim.native.text import COMMON


@lru_cache(maxsize=1)
def binding() -> Any:
    """LLVM, ready for this machine; imported when first asked for."""
    import llvmlite.binding as llvm

    llvm.initialize_native_target()
    llvm.initialize_native_asmprinter()
    return llvm


def host() -> tuple[str, str]:
    """Name and features of this processor."""
    llvm = binding()
    return llvm.get_host_cpu_name(), llvm.get_host_cpu_features().flatten()


def target_machine(effort: int) -> Any:
    llvm = binding()
    cpu, features = host()
    target = llvm.Target.from_default_triple()
    return target.create_target_machine(cpu=cpu, features=features, opt=effort, jit=True)


class Code:
    """Loaded machine code. ``object``: the object file it was loaded from."""

    def __init__(self, object_code: bytes) -> None:
        llvm = binding()
        self.object = object_code
        self.engine = llvm.create_mcjit_compiler(llvm.parse_assembly(""), target_machine(0))
        self.engine.add_object_file(llvm.ObjectFileRef.from_data(object_code))
        self.engine.finalize_object()

    def address(self, name: str) -> int:
        return int(self.engine.get_function_address(name))


def compile_text(text: str, effort: int = 2) -> bytes:
    """The object file of a module's text. ``effort``: LLVM's optimisation level."""
    llvm = binding()
    module = llvm.parse_assembly(text + COMMON)
    machine = target_machine(effort)
    module.triple = machine.triple
    module.data_layout = str(machine.target_data)
    options = llvm.create_pipeline_tuning_options(speed_level=effort)
    options.loop_vectorization = options.slp_vectorization = False
    builder = llvm.create_pass_builder(machine, options)
    builder.getModulePassManager().run(module, builder)
    return bytes(machine.emit_object(module))
