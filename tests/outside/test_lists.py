"""Lists written by astropy: the program finds the same figures in every format."""

import json
import subprocess

import make_list_formats

NAMES = ["list.csv", "list.ecsv", "comma.ecsv", "list.fits", "tabledata.vot", "binary.vot",
         "binary2.vot", "list.parquet"]
HEAD = """[field]
name = "Lantern core"
reference_epoch = 2008.0
[stars]
speed_mas_yr = 6.0
[instrument.first]
fwhm_mas = 60.0
unit = "mas"
"""


def test_every_format_gives_the_same_figures(program, tmp_path):
    make_list_formats.main(tmp_path)
    epochs = [f'[[epoch]]\ntime = {2000 + k}.5\nname = "{k}"\nfile = "{name}"\n'
              for k, name in enumerate(NAMES)]
    campaign = tmp_path / "campaign.toml"
    campaign.write_text(HEAD + "".join(epochs))
    done = subprocess.run([program, "check", str(campaign), "--json"], check=True,
                          capture_output=True, text=True)
    lists = json.loads(done.stdout)["lists"]
    assert len(lists) == len(NAMES)
    figures = ["detections", "error_floor_mas", "error_median_mas", "mag", "without_magnitude",
               "width_mas", "stars_per_resolution_element"]
    for name, found in zip(NAMES, lists):
        assert [found[f] for f in figures] == [lists[0][f] for f in figures], name
    assert lists[0]["detections"] == 7 and lists[0]["without_magnitude"] == 1
    assert lists[0]["mag"] == [12.0, 14.25, 16.5]
