"""Bad requests of ``run --frames``: what is cut, how, and what is in the files."""

from __future__ import annotations

import numpy as np

from tests.robustness.workshop import Row, a_folder, a_pipe, npy, npy_with_header

RUN = "run total --frames x=x.npy --give n=4"
X = {"x.npy": npy(np.arange(10, dtype=np.int16))}
FAR = np.zeros(9, np.int32)
FAR[7] = 70000
REACH = """
kernel  reach
core    pair7
given   x : i16[2] at g1
returns y : i32    in g4
start:
@0 lh g5, [g1]
@4 add g6, g1, g5
@5 lb g4, [g6]
@6 halt
"""
REACHES = {"reach.vliw": REACH, "x.npy": npy(np.array([0, 0, 1, 0, 9, 0], np.int16))}

ROWS = [
    Row("frames without a sign", "run total --frames x", ["bad-option"]),
    Row("frames without a file", "run total --frames x=", ["bad-option"]),
    Row("frames of one name twice", f"{RUN} --frames x=x.npy", ["bad-option"], files=X),
    Row("frames of no input", "run total --frames z=x.npy --give n=4", ["frame-input"], files=X),
    Row("frames of an output", "run total --frames sum=x.npy --give n=4", ["frame-input"], files=X),
    Row("frames and the whole", f"{RUN} --give x=1,2", ["frame-input"], files=X),
    Row("frames of no known length", "run total --frames x=x.npy", ["frame-length"], files=X, remedy="n="),
    Row("frames of no length", "run total --frames x=x.npy --give n=0", ["frame-length"], files=X),
    Row("frames longer than all", "run total --frames x=x.npy --give n=11", ["frame-count"], files=X, remedy="--pad"),
    Row("frames of nothing", RUN, ["frame-count"], files={"x.npy": npy(np.zeros(0, np.int16))}),
    Row("frames in three dimensions", RUN, ["frame-input"], files={"x.npy": npy(np.zeros((2, 2, 2), np.int16))}),
    Row("frames of text", RUN, ["frame-input"], files={"x.npy": npy(["a", "b"])}),
    Row("frames of rows of another length", RUN, ["size-conflict"], files={"x.npy": npy(np.zeros((3, 5), np.int16))}),
    Row("frames of one number", "run total --frames x=7 --give n=4", ["array-file"]),
    Row("a sample out of range, in the midst", RUN, ["value-range"], files={"x.npy": npy(FAR)}, says="x[7] = 70000"),
    Row("samples that are fractions", RUN, ["array-type"], files={"x.npy": npy(np.linspace(0, 1, 9))}),
    Row("a recording that is not there", RUN, ["array-file"]),
    Row("a recording that is a folder", RUN, ["array-file"], files={"x.npy": a_folder}),
    Row("a recording that is a pipe", RUN, ["array-file"], files={"x.npy": a_pipe}, process=True),
    Row("a recording cut short", RUN, ["array-file"], files={"x.npy": npy(np.zeros(99, np.int16))[:-1]}),
    Row(
        "a recording that promises too much",
        RUN,
        ["array-file"],
        files={"x.npy": npy_with_header("{'descr': '<i2', 'fortran_order': False, 'shape': (9999999999999,), }")},
    ),
    Row("a hop without frames", "run total --hop 4", ["bad-option"]),
    Row("padding without frames", "run total --pad", ["bad-option"]),
    Row("a hop of nothing", f"{RUN} --hop 0", ["frame-step"], files=X),
    Row("a hop backwards", f"{RUN} --hop -4", ["frame-step"], files=X),
    Row("a hop of a half", f"{RUN} --hop 2.5", ["frame-step"], files=X),
    Row("a hop in words", f"{RUN} --hop far", ["unknown-name"], files=X),
    Row("a hop that is no expression", f"{RUN} --hop '4 +'", ["bad-expression"], files=X),
    Row("a hop of another", f"{RUN} --hop y=4", ["frame-step"], files=X),
    Row("two hops", f"{RUN} --hop 4 --hop 5", ["bad-option"], files=X),
    Row("a lead below zero", f"{RUN} --lead -1", ["frame-step"], files=X),
    Row("frames of a case", f"{RUN} --case zeros", ["bad-option"], files=X),
    Row("frames, traced", f"{RUN} --trace", ["bad-option"], files=X),
    Row("frames to look into", f"{RUN} --debug", ["bad-option"], files=X),
    Row("frames interrupted", f"{RUN} --interrupt-at 3", ["bad-option"], files=X),
    Row("frames over a file", f"{RUN} --save sum=x.npy", ["file-exists"], files=X, remedy="--replace"),
    Row(
        "a frame that breaks a rule", "run reach.vliw --frames x=x.npy", ["out-of-array"], 1, REACHES, says="frame 2: "
    ),
    Row(
        "nothing is kept of frames that break off",
        "run reach.vliw --frames x=x.npy --save y=y.npy",
        ["out-of-array"],
        1,
        REACHES,
        says="nothing saved",
    ),
    Row("too few cycles for a frame", f"{RUN} --limit 9", ["cycle-limit"], 1, X, says="frame 0"),
]
