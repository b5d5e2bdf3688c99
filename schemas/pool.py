"""The pooled factor of an aircraft on the wire: `service.fleet` -> JSON."""

from collections.abc import Mapping, Sequence
from typing import Any

from marshmallow import fields

from schemas.fields import Answer, EstimateField, Instant, Number, Text
from schemas.flight import cautions
from schemas.reduction import CautionSchema, VersionSchema
from service.domain.kept import AircraftRecord, PooledFlight
from service.domain.results import Estimate
from service.version import METHOD, SERVICE

RECOMMENDATIONS = ("load_after_verification", "keep", "check_probe", "fly_more")


class PooledFlightSchema(Answer):
    class Meta:
        title = "PooledFlight"
        description = "An accepted flight of the installation, and its part in the pool."

    flight = Text("Id of the flight.")
    flown_utc = Instant("When it was flown.")
    reduction = fields.Integer(metadata={"description": "Number of the reduction that it comes from.", "minimum": 1})
    speed_scale = EstimateField("Total speed scale from this flight alone.")
    weight = Number("Of this flight in the pooled logarithm; they add up to 1.", at_least=0)
    apart = fields.Boolean(metadata={"description": "Left out: it does not agree with the others."})
    stale = fields.Boolean(metadata={"description": "Has the aircraft's profile changed since?"})
    method = Text("Version of the method.", allow_none=True)


class HeterogeneitySchema(Answer):
    class Meta:
        title = "Heterogeneity"
        description = "Cochran's test that flights differ by no more than their own uncertainties."

    statistic = Number("Q.")
    degrees_of_freedom = fields.Integer(metadata={"description": "Flights less one.", "minimum": 1})
    chance = Number("Of a Q as large as this where flights agree.", at_least=0, at_most=1)


class NewestSchema(Answer):
    class Meta:
        title = "NewestFlight"
        description = "Does the newest flight disagree with those before it? Null with fewer than three before it."

    flight = Text("The newest flight.", allow_none=True)
    difference = EstimateField("ln speed scale of the newest less that of the earlier ones.")
    statistic = Number("`chance` as a deviate of the standard normal.", allow_none=True)
    chance = Number("Of a difference as large as this where the probe has not changed.", allow_none=True)
    disagrees = fields.Boolean(metadata={"description": "Is it so unlikely that the probe should be checked?"})


class DriftSchema(Answer):
    class Meta:
        title = "Drift"
        description = "Does the scale move slowly? Null with fewer than four flights."

    change = EstimateField("Of ln speed scale from the first to the last flight.")
    change_per_year = EstimateField("The same per year.")
    statistic = Number("`chance` as a deviate of the standard normal.", allow_none=True)
    chance = Number("Of a change as large as this where the scale does not move.", allow_none=True)
    drifts = fields.Boolean(metadata={"description": "Is it so unlikely that the probe should be checked?"})


class PoolSchema(Answer):
    class Meta:
        title = "PooledCalibration"
        description = (
            "The factor to load, pooled over the accepted flights of the present installation that are not excluded, "
            "each log once. It is the total scale: with any factor that the recorder had applied."
        )

    aircraft = Text("Name of the aircraft.")
    installation_from_utc = Instant("Since when the installation counts; null: always.", allow_none=True)
    recommendation = fields.String(metadata={"description": "What to do.", "enum": list(RECOMMENDATIONS)})
    advice = Text("The same in words.")
    flights_at_odds = fields.List(fields.String(), metadata={"description": "Flights that disagree with the rest."})
    speed_scale = EstimateField("The factor to load where speed is multiplied; null without flights.")
    pressure_scale = EstimateField("The factor to load where pressure is multiplied; null without flights.")
    next_flight_speed_scale = EstimateField("Where the next flight's speed scale will fall if nothing changes.")
    between_flights = EstimateField(
        "Standard deviation of ln speed scale between flights, beyond their own uncertainties; null with one flight."
    )
    heterogeneity = fields.Nested(
        HeterogeneitySchema, allow_none=True, metadata={"description": "Null with fewer than two flights."}
    )
    newest = fields.Nested(NewestSchema, metadata={"description": "Does the newest flight disagree?"})
    drift = fields.Nested(DriftSchema, metadata={"description": "Does the scale move?"})
    flights = fields.List(
        fields.Nested(PooledFlightSchema), metadata={"description": "The flights behind it, in the order flown."}
    )
    stale = fields.Boolean(metadata={"description": "Has the profile changed since one of them was reduced?"})
    cautions = fields.List(fields.Nested(CautionSchema), metadata={"description": "Always all of them."})
    version = fields.Nested(VersionSchema, metadata={"description": "What made the answer."})


def dump_pool(
    aircraft: AircraftRecord, flights: Sequence[PooledFlight], alone: Mapping[str, Estimate], assessment: Any
) -> dict[str, Any]:
    """The answer about an aircraft.

    Parameters
    ----------
    flights : behind the pool, in the order flown.
    alone : flight -> total speed scale from it alone.
    assessment : of `service.fleet.assess`, read by the names of its records.
    """
    pool = assessment.pool
    shares = {} if pool is None else {share.flight: share for share in pool.flights}
    answer = {
        "aircraft": aircraft.name,
        "installation_from_utc": aircraft.installation_from_utc,
        "recommendation": str(assessment.advice.recommendation),
        "advice": assessment.advice.words,
        "flights_at_odds": assessment.advice.flights,
        "speed_scale": pool and pool.speed_scale,
        "pressure_scale": pool and pool.pressure_scale,
        "next_flight_speed_scale": pool and pool.next_flight,
        "between_flights": pool and pool.between_flights,
        "heterogeneity": pool and pool.heterogeneity,
        "newest": assessment.newest,
        "drift": assessment.drift,
        "flights": [
            {
                "flight": flight.flight_id,
                "flown_utc": flight.flown_utc,
                "reduction": flight.number,
                "speed_scale": alone[flight.flight_id],
                "weight": shares[flight.flight_id].weight,
                "apart": shares[flight.flight_id].apart,
                "stale": flight.stale,
                "method": flight.method,
            }
            for flight in flights
        ],
        "stale": any(flight.stale for flight in flights),
        "cautions": cautions(),
        "version": {"service": SERVICE, "method": METHOD},
    }
    dumped: dict[str, Any] = PoolSchema().dump(answer)
    return dumped
