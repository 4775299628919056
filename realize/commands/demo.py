"""The command `demo`."""

from __future__ import annotations

from realize.commands.common import Context, print_record, say, write_log


def execute(context: Context, seed: int) -> int:
    """Do the whole job on the invented axis, in a fresh folder."""
    from realize.files import write
    from realize.reports import draw
    from realize.reports.tables import demo_table
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
        say(demo_table(record))
    return 4 if any(made.receipt.failed for made in conversions.values()) else 0
