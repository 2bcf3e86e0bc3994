"""Feature tables with known families, for the tests of the sorter."""

import numpy as np
import pandas as pd

FAMILIES = ("arch", "comb", "knock", "ring", "whistle", "chirp_like")


def family_table(
    seed,
    *,
    each=60,
    families=FAMILIES,
    width=24,
    spread=1.0,
    epochs=20,
    missing=0.02,
):
    """Make a table, its families and its blocks of time.

    Families are curved clouds: a few hidden quantities move all features together.
    Which family lies where depends on its name alone, never on the seed. Examples of
    one epoch share an offset, so a split that ignores time would flatter.
    """
    rng = np.random.default_rng(seed)
    rows, names, groups = [], [], []
    for family in families:
        law = np.random.default_rng([ord(c) for c in family])
        middle = law.normal(0.0, 2.0, width)
        bend = law.normal(0.0, 0.8, (3, width))
        scale = law.uniform(0.2, 0.6, width)
        epoch = rng.integers(0, epochs, each)
        offset = rng.normal(0.0, 0.3, (epochs, width))
        hidden = rng.normal(0.0, 1.0, (each, 3))
        hidden[:, 2] = hidden[:, 0] ** 2 - 1.0
        values = middle + hidden @ bend + offset[epoch]
        values += spread * scale * rng.standard_t(6, (each, width))
        rows.append(values)
        names += [family] * each
        groups.append(epoch)
    values = np.concatenate(rows)
    values[rng.random(values.shape) < missing] = np.nan
    columns = [f"feature_{i:02d}" for i in range(width)]
    table = pd.DataFrame(values, columns=columns)
    return table, np.array(names), np.concatenate(groups)
