"""Forest change in the invented district of Ondrith: from two small tables to areas with intervals."""

from pathlib import Path

import change_assess as ca

HERE = Path(__file__).parent


def main() -> None:
    """Estimate, write the results beside this file, and print the lines of a report."""
    sample = ca.read_sample(HERE / "sample.csv", strata=HERE / "strata.csv")
    result = ca.estimate(sample, map="map", reference="ref")
    result.save(HERE / "results")
    for name in ("forest loss", "forest gain"):
        area = result[name].area_ha
        lower, upper, *_ = area.interval(0.95)
        print(f"{name}: {area.value:,.0f} ha (SE {area.se:,.0f}), 95 % interval {lower:,.0f} to {upper:,.0f}")
    net = result["forest gain"].area_ha - result["forest loss"].area_ha  # one sample: the covariance is kept
    print(f"net change of forest: {net.value:,.0f} ha (SE {net.se:,.0f})")
    overall = result.overall_accuracy
    print(f"overall accuracy: {overall.value:.3f} (SE {overall.se:.3f})")


if __name__ == "__main__":
    main()
