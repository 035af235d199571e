//! What each flag means, in one sentence.

/// The meaning of a flag by its name; `None` for a flag that is not in the list, whose first message is then shown.
pub(super) fn flag_meaning(flag: &str) -> Option<&'static str> {
    Some(match flag {
        "not-converged" => "the search for the best curve did not settle; no parameter is given",
        "touched-bound" => {
            "a parameter ended on the bound of the search: the data do not determine it (a note where it is the noise \
             SD alone, too small to be measured)"
        }
        "ceiling-open" => "the rate still climbs at the largest drive: no maximum rate, no half-rise",
        "ceiling-loose" => "the maximum rate has an upper bound, but a wide interval",
        "ceiling-declining" => "the rate falls at high drive; steps above the peak were left out",
        "few-levels" => "few distinct drives for a curve of four parameters",
        "no-silent-level" => "the cell fires at every drive: the threshold is a guess",
        "below-half-rise" => "no drive reached half of the fitted maximum rate",
        "few-spikes" => "hardly any spike in all steps",
        "short-interval" => "two spikes closer than a neuron fires: one spike detected twice, or two cells",
        "faster-than-intervals" => "the fitted maximum is more than the shortest interval allows",
        "stops-early" => "firing stops within the step: the rate tells of the burst, not of the step",
        "strong-adaptation" => "the rate falls strongly within the step",
        "irregular" => "intervals scatter as those of a random process do, or more",
        "spikes-outside" => "many spikes outside all steps: the cell fires on its own",
        "drift" => "the rate of repeated steps changed over the recording",
        "lack-of-fit" => "the level means miss the curve by more than repeats scatter",
        "rival-better" => "another rate function describes the cell far better",
        "non-monotone" => "the rate of a level falls below that of a smaller drive",
        "duplicates-dropped" => "spike times that were there more than once were counted once",
        "down-weighted" => "the robust fit gives some steps less than half of their weight",
        _ => return None,
    })
}
