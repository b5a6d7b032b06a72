"""What the command line and the guide say of a measure."""

import json

from test_registry import Plain

from geofractal.describe import as_dict, as_lines
from geofractal.registry import load_measure


def test_a_measure_is_described_by_its_own_metadata():
    told = as_dict(Plain())
    assert told["options"] == [
        {
            "key": "factor",
            "type": "number",
            "required": False,
            "default": 1.0,
            "meaning": "what the figure is multiplied by",
        }
    ]
    assert [column["name"] for column in told["columns"]] == ["plain_figure_m", "plain_note"]
    assert json.loads(json.dumps(told)) == told


def test_text_and_data_agree():
    measure = load_measure("divider-dimension")
    told, text = as_dict(measure), "\n".join(as_lines(measure))
    for column in (*told["columns"], *told["ladder_columns"]):
        assert f"{column['name']} ({column['short']}; " in text
        assert column["meaning"] in text
    for option in told["options"]:
        assert f"{option['key']} ({option['type']}; " in text
        assert option["meaning"] in text
    assert all(source in text for source in told["sources"])
