"""The catalogue of everything published that ships with basinwright, read off the registers."""

from __future__ import annotations

from basinwright import published
from basinwright.registry import Kind, Method, methods

HEADINGS: dict[Kind, str] = {
    "timing": "Timing methods (timing.adopt)",
    "unit_hydrograph": "Unit hydrographs (unit_hydrograph.shape)",
    "storm": "Storms (storm.distribution)",
}


def show() -> None:
    """Print every timing method, unit hydrograph, storm and published table with source and range."""
    for kind, heading in HEADINGS.items():
        print(f"{heading}\n{'=' * len(heading)}")
        for entry in methods(kind).values():
            print(f"\n{entry.key}: {entry.name}")
            for name, text in facts(entry):
                print(f"    {name:<8}{text}")
        print()
    print("Published tables\n================")
    for name in published.names():
        table = published.table(name)
        print(f"\n{name}: {table.title}\n    source  {table.source}\n    checked {table.checked}")


def facts(entry: Method) -> list[tuple[str, str]]:
    """Return what is published of a method, each fact with its label: form, inputs, range, limits, source."""
    ranges = "; ".join(
        f"{name}: {bounds.printed or f'{bounds.low:g} to {bounds.high:g}'}"
        for name, bounds in entry.valid_range.items()
    )
    return [
        ("form", entry.form),
        ("inputs", ", ".join(entry.inputs)),
        ("range", ranges or "none published"),
        ("limits", entry.limits),
        ("source", f"{entry.source}" + (f" ({entry.source.note})" if entry.source.note else "")),
    ]
