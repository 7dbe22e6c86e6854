"""Mark a record and keep the beat table and the figure. Ends in demo.png and demo_beats.csv in the folder given (default: marked).

    python examples/01_mark_a_record.py                     an invented record
    python examples/01_mark_a_record.py FOLDER record.edf   a record of yours
"""

import sys

import caval

folder = sys.argv[1] if len(sys.argv) > 1 else "marked"
record = caval.read(sys.argv[2]) if len(sys.argv) > 2 else caval.demo_recording(minutes=2)

result = caval.mark(record)  # roles={"cvp": "P2"}, units={"P2": "cmH2O"} where labels and units do not tell
for text in result.warnings:
    print("note:", text)

# The marks table is the truth; a row per beat is derived from it. An absent wave is NaN, and its state says why.
beats = result.beats[result.beats["usable"]]
print(beats[["r_time_s", "a_mmhg", "z_mmhg", "x_mmhg", "v_mmhg", "y_mmhg"]].describe().loc[["count", "25%", "50%", "75%"]].round(2))

written = result.write(folder, table="csv", track=["csv"], force=True)
print("\n".join(str(path) for path in written))
