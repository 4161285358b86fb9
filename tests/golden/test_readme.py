"""What the README shows is what the program prints."""

from pathlib import Path

from pipeline.commission import Request, commission
from pipeline.report.outline import build_outline
from pipeline.report.terminal import summary_text
from pipeline.sheetfile import load_sheet

ROOT = Path(__file__).parents[2]
LOG = ROOT / "demo_logs" / "tunnel_air_temperature.csv"


def test_the_worked_example_is_real():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    shown = readme.split("$ firstgain tune demo_logs/tunnel_air_temperature.csv\n", 1)[1].split("```", 1)[0]
    record = commission(LOG, request=Request(sheet=load_sheet(LOG.with_suffix(".toml"))))
    said = summary_text(build_outline(record))
    assert shown.strip().startswith(said)
    assert (ROOT / "reports" / "tunnel_air_temperature.png").is_file()
