"""Draw the small invented campaign again; see README.md."""

from pathlib import Path

from identkit.synthetic import InventedBench, Story, invent_campaign, to_dataset

UNITS, HEADS, TEMPERATURES, POINTS = 6, 2, (15.0, 45.0), 300


def main(target: Path) -> None:
    """Write the campaign as one NetCDF file."""
    campaign = invent_campaign(
        seed=7,
        units=UNITS,
        heads=HEADS,
        temperatures=TEMPERATURES,
        bench=InventedBench(points=POINTS),
        story=Story(odd_lot="", cracked_unit=""),
    )
    data = to_dataset(campaign).drop_vars(["usable_mask", "source"])
    data.attrs["title"] = (
        "Invented campaign of an invented positioning actuator; nothing is measured"
    )
    compressed = {name: {"zlib": True, "complevel": 9, "shuffle": True} for name in data.data_vars}
    compressed["averages"] = {}
    data.to_netcdf(target / "responses.nc", engine="h5netcdf", encoding=compressed)


if __name__ == "__main__":
    main(Path(__file__).parent)
