"""The command `demo`."""

from __future__ import annotations

from typing import Any

from realize.commands.common import Context, print_record, say, write_log


def execute(context: Context, seed: int) -> int:
    """Do the whole job on the invented axis, in a fresh folder."""
    from realize.files import write
    from realize.reports import draw
    from realize.steps.demo import fresh_folder, run_demo
    from realize.testing.scenario import bench_axis

    folder = fresh_folder(context.output)
    say("fitting, converting and reducing an invented positioning axis ...")
    conversions, record = run_demo(seed)
    data = bench_axis(seed)
    files = {"axis.csv": data} | {f"axis-{name}.json": made.model for name, made in conversions.items()}
    for name, model in files.items():
        write(model, str(folder / name))
    entries = [("measured", data), ("fitted", conversions["fitted"].model), ("reduced", conversions["reduced"].model)]
    for name in ("axis.png", "axis.svg"):
        draw(entries, str(folder / name))
    record |= {"folder": str(folder), "files": [*files, "axis.png", "axis.svg"]}
    write_log(context, record)
    if context.json:
        print_record(record)
    else:
        say(_words(record))
    return 4 if any(made.receipt.failed for made in conversions.values()) else 0


def _words(record: dict[str, Any]) -> str:
    """Return what was made, how well, and where the files are."""
    against = record["against_the_invented_truth"]
    lines = [
        f"{name:10s}{record[name]['kind']}, order {record[name]['order']}"
        + (f", {against[name]:.2g} of the largest gain off the invented truth" if name in against else "")
        for name in ("fitted", "converted", "reduced")
    ]
    return "\n".join([*lines, f"files in {record['folder']}: {', '.join(record['files'])}"])
