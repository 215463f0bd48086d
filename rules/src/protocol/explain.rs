//! A protocol told back in plain sentences that a committee could sign.

use super::condition::{By, Condition, Medicines, Over, QtcIs, RiskState, State, TracingIs};
use super::{Orders, Protocol, RosterEntry, Tier, Watch};
use crate::evaluate::of_word;
use crate::fact::Feed;
use crate::watch;
use crate::words;
use chrono::{NaiveTime, TimeDelta};
use std::fmt::Write;

/// The whole protocol, as paragraphs.
pub fn explain(protocol: &Protocol) -> String {
    let mut text = String::new();
    let mut say = |line: String| {
        let _ = writeln!(text, "{line}"); // a String can't fail
    };
    say(format!(
        "Protocol \"{}\", version {} ({}).",
        protocol.name,
        protocol.version,
        protocol.hash.short()
    ));
    match &protocol.approved {
        Some((by, on)) => say(format!("Approved by {by} on {on}.")),
        None => say("Nobody has approved it: it is an example, and every message says so.".into()),
    }
    say(format!(
        "QTc is read as {}. Shown beside it: {}.",
        protocol.reading.words(),
        words::list(protocol.reading.shown.iter().map(|f| f.name()))
    ));
    for (name, limit) in &protocol.limits {
        let mut line = format!(
            "The limit \"{name}\" is {} ms for women and {} ms for men",
            limit.female_ms.0, limit.male_ms.0
        );
        for from in &limit.older {
            let _ = write!(
                line,
                ", from {} years {} and {} ms",
                from.from_years, from.female_ms.0, from.male_ms.0
            );
        }
        if let Some(formula) = limit.formula {
            let _ = write!(line, "; it is a limit of QTc by {formula} and by no other");
        }
        say(format!("{line}; the lowest that may hold where sex or age is not known."));
    }
    say(format!(
        "The baseline is the last good tracing before the first listed medicine, at most {} before it; else the first good one; \
         else what a person chose.",
        span(protocol.baseline_within)
    ));
    say(format!(
        "A listed medicine is active until {} half-lives after its last dose ({} where the list gives no half-life); an order alone {}.",
        protocol.active_half_lives,
        span(protocol.unknown_half_life),
        match protocol.orders {
            Orders::Count => "counts as if its doses were given",
            Orders::Ignore => "does not count",
        }
    ));
    say(format!(
        "A result older than {} is stale: shown, not trusted. Calcium is corrected with an albumin taken within {} of it.",
        span(protocol.stale_after),
        span(protocol.albumin_within)
    ));
    let wide = protocol.tiers.get(protocol.wide_qrs_tier).map_or("", |tier| tier.name.as_str());
    say(format!(
        "With QRS of {} ms or more, or pacing, a QTc reaches at most the tier \"{wide}\" until it is over-read.",
        protocol.wide_qrs_ms
    ));
    say(format!("The doubt of an over-read is taken as {} ms.", protocol.over_read_doubt_ms));
    for (feed, after) in &protocol.silent_after {
        say(format!(
            "Nothing from the {} feed for {} is technical trouble.",
            feed_word(*feed),
            span(*after)
        ));
    }
    let technical = protocol.tiers.get(protocol.technical.tier).map_or("", |t| t.name.as_str());
    say(format!(
        "Technical trouble is told to {} as \"{technical}\": {}",
        words::list(protocol.technical.tell.iter().map(|role| role.as_str())),
        protocol.technical.to_do
    ));
    if !protocol.intents.is_empty() {
        say(format!("Who acknowledges says one of: {}.", protocol.intents.join("; ")));
    }
    say(String::new());
    for tier in &protocol.tiers {
        say(of_tier(tier));
    }
    say(String::new());
    for entry in &protocol.roster {
        say(of_entry(entry));
    }
    say(String::new());
    for watch in &protocol.watches {
        say(of_watch(watch));
    }
    say(String::new());
    for rule in &protocol.rules {
        let tier = |rank: usize| protocol.tiers.get(rank).map_or("", |tier| tier.name.as_str());
        let only = rule
            .only_if
            .as_ref()
            .map(|only| format!("For patients of whom it holds that {}: ", of(only)))
            .unwrap_or_default();
        let borderline =
            rule.borderline.map_or("only shown".into(), |rank| format!("\"{}\"", tier(rank)));
        let cannot =
            rule.cannot_tell.map_or("only shown".into(), |rank| format!("\"{}\"", tier(rank)));
        say(format!(
            "Rule {} ({}): {only}when {}, the tier is \"{}\". Borderline is {borderline}; what can't be told is {cannot}. It says: {}{}",
            rule.id,
            rule.concern,
            of(&rule.when),
            tier(rule.tier),
            rule.says,
            rule.to_do
                .as_deref()
                .map(|to_do| format!(" Its own words on what to do: {to_do}"))
                .unwrap_or_default()
        ));
    }
    text
}

fn of_tier(tier: &Tier) -> String {
    let mut text = format!("Tier \"{}\"", tier.name);
    if tier.tell.is_empty() {
        text.push_str(" tells nobody; it is kept and shown.");
    } else {
        let _ = write!(text, " tells {}", words::list(tier.tell.iter().map(|role| role.as_str())));
        if let Some(within) = tier.answer_within {
            let then = words::list(tier.then.iter().map(|role| role.as_str()));
            let _ = write!(
                text,
                "; unanswered for {}, it goes on to {then}, one after the other, and to the last again and again",
                span(within)
            );
        }
        if let Some((from, to)) = tier.quiet {
            let _ = write!(text, "; between {} and {} it waits", clock(from), clock(to));
        }
        text.push('.');
    }
    let _ = write!(text, " What to do: {}", tier.to_do);
    text
}

fn of_entry(entry: &RosterEntry) -> String {
    let wards = if entry.wards.is_empty() {
        "on every ward".to_owned()
    } else {
        format!("on {}", words::list(entry.wards.iter().map(|ward| ward.as_str())))
    };
    let hours = entry
        .hours
        .map(|(from, to)| format!(", from {} to {}", clock(from), clock(to)))
        .unwrap_or_default();
    format!(
        "{} {wards}{hours} is reached at {}.",
        entry.role,
        words::list(entry.mail.iter().map(|mail| mail.expose()))
    )
}

fn feed_word(feed: Feed) -> &'static str {
    match feed {
        Feed::Tracings => "tracing",
        Feed::Results => "result",
        Feed::Medicines => "medicine",
    }
}

fn of_watch(watch: &Watch) -> String {
    let mut whose = Vec::new();
    for (name, values) in
        [("evidence", &watch.evidence), ("group", &watch.groups), ("substance", &watch.substances)]
    {
        if !values.is_empty() {
            whose.push(format!(
                "{name} {}",
                words::list(values.iter().map(|v| v.as_ref().as_str()))
            ));
        }
    }
    let whose = if whose.is_empty() {
        "every listed medicine".to_owned()
    } else {
        format!("listed medicines of {}", whose.join(" or "))
    };
    let mut when = Vec::new();
    if let Some(within) = watch.before_first_dose {
        when.push(format!("before the first dose (not older than {})", span(within)));
    }
    when.extend(watch.after_start.iter().map(|after| format!("{} after the start", span(*after))));
    when.extend(
        watch
            .after_dose_change
            .iter()
            .map(|after| format!("{} after a change of dose", span(*after))),
    );
    if let Some((n, after)) = watch.after_doses {
        when.push(format!("{} after each of the first {n} doses", span(after)));
    }
    if watch.at_steady_state {
        when.push("at five half-lives".into());
    }
    if let Some(every) = watch.then_every {
        when.push(format!("then every {}", span(every)));
    }
    format!(
        "Watch {}: for {whose}, a {} is wanted {}; overdue {} later.",
        watch.id,
        watch::word(watch.asks_for),
        words::list(when),
        span(watch.grace)
    )
}

fn of(condition: &Condition) -> String {
    let each = |parts: &[Condition]| parts.iter().map(of).collect::<Vec<_>>();
    match condition {
        Condition::All(parts) => words::list(each(parts)),
        Condition::Any(parts) => format!("at least one of these: {}", each(parts).join("; or ")),
        Condition::None(parts) => format!("not one of these: {}", each(parts).join("; or ")),
        Condition::AtLeast(few) => {
            format!("at least {} of these: {}", few.n.as_ref(), each(&few.of).join("; "))
        }
        Condition::Qtc(is) => qtc(is),
        Condition::QtcRise(rise) => {
            let over = match rise.over {
                Over::Baseline => "the baseline",
                Over::Last => "the tracing before",
            };
            format!("QTc has risen by {} ms or more over {over}", rise.at_least_ms.0)
        }
        Condition::QtNomogram(_) => "QT lies on or above the overdose nomogram".into(),
        Condition::JtIndex(is) => {
            format!("QRS is wide and the JT index is {} or more", is.at_least.0)
        }
        Condition::Rate(is) => match (is.below_per_min, is.above_per_min) {
            (Some(low), Some(high)) => {
                format!("the rate is below {} or above {} per minute", low.0, high.0)
            }
            (Some(low), None) => format!("the rate is below {} per minute", low.0),
            (None, Some(high)) => format!("the rate is above {} per minute", high.0),
            (None, None) => "nothing is asked of the rate".into(),
        },
        Condition::Qrs(is) => format!("QRS is {} ms or more", is.at_least_ms.0),
        Condition::Tracing(is) => match is {
            TracingIs::Doubtful => "the latest tracing is doubtful".into(),
            TracingIs::Unreadable => "no QT can be told from the latest tracing".into(),
            TracingIs::WideQrs => "the latest tracing has a wide QRS or is paced".into(),
            TracingIs::IrregularlyIrregular => "RR is irregularly irregular".into(),
            TracingIs::Missing => "there is no tracing in this stay".into(),
        },
        Condition::FormulasSplit(limit) => format!(
            "the formulas shown fall on different sides of {}",
            limit_words(
                limit.at_least_ms.map(|ms| ms.0),
                limit.at_least.as_ref().map(|name| name.as_ref().as_str())
            )
        ),
        Condition::PrintedDiffers(is) => {
            format!("the cart's QT differs from the measured one by more than {} ms", is.by_ms.0)
        }
        Condition::Medicines(is) => medicines(is),
        Condition::Exposure(_) => {
            "one active listed medicine raises the exposure to another".into()
        }
        Condition::ReducedClearance(is) => format!(
            "creatinine clearance is below {} mL/min with an active listed medicine that the kidney clears",
            is.below_ml_per_min.0
        ),
        Condition::NotRecognised(is) => {
            format!("{} or more medicines of the feed are not on the list", is.at_least)
        }
        Condition::Electrolyte(is) => {
            let name = of_word(is.of);
            match (is.below_mmol_l, is.above_mmol_l, is.falling_by_mmol_l, is.within_h) {
                (Some(low), _, _, _) => format!("{name} is below {} mmol/L", low.0),
                (_, Some(high), _, _) => format!("{name} is above {} mmol/L", high.0),
                (_, _, Some(by), Some(h)) => {
                    format!("{name} fell by {} mmol/L or more within {} h", by.0, h.0)
                }
                _ => format!("nothing is asked of {name}"),
            }
        }
        Condition::ElectrolyteState(is) => {
            let name = of_word(is.of);
            match is.is {
                State::Stale => format!("{name} is stale"),
                State::NeverMeasured => format!("{name} was not measured in this stay"),
                State::Haemolysed => format!("the latest {name} comes from an unreliable specimen"),
            }
        }
        Condition::LowCalcium(is) => format!(
            "ionised calcium is below {} mmol/L or, where no ionised calcium is as recent, calcium corrected for albumin is below {} mmol/L",
            is.ionised_below_mmol_l.0, is.corrected_below_mmol_l.0
        ),
        Condition::Risk(is) => {
            let name = words::condition(is.condition);
            match is.is {
                RiskState::Recorded => format!("{name} is recorded"),
                RiskState::RuledOut => format!("{name} is ruled out"),
                RiskState::NotRecorded => format!("{name} is not recorded either way"),
            }
        }
        Condition::Tisdale(is) => format!("the Tisdale score is {} or more", is.at_least.0),
        Condition::Age(is) => format!("the patient is {} years or older", is.at_least_years),
        Condition::Overdue(is) if is.by_h > 0.0 => {
            format!("what the watch {} asks for is overdue by {} h", is.watch.as_ref(), is.by_h)
        }
        Condition::Overdue(is) => {
            format!("what the watch {} asks for is overdue", is.watch.as_ref())
        }
    }
}

fn limit_words(ms: Option<f64>, name: Option<&str>) -> String {
    match (ms, name) {
        (Some(ms), _) => format!("{ms} ms"),
        (None, Some(name)) => format!("the limit \"{name}\""),
        (None, None) => "no limit".into(),
    }
}

fn qtc(is: &QtcIs) -> String {
    if let Some(below) = is.below_ms {
        return format!("QTc is below {} ms", below.0);
    }
    let limit = limit_words(
        is.at_least_ms.map(|ms| ms.0),
        is.at_least.as_ref().map(|name| name.as_ref().as_str()),
    );
    let by = match is.by {
        None => String::new(),
        Some(By::Any) => " by at least one of the formulas shown".into(),
        Some(By::All) => " by every formula shown".into(),
        Some(By::One(formula)) => format!(" by {formula}"),
    };
    format!("QTc is at or above {limit}{by}")
}

fn medicines(is: &Medicines) -> String {
    let names = |list: &[toml::Spanned<String>]| {
        words::list(list.iter().map(|name| name.as_ref().as_str()))
    };
    let mut text = format!("{} or more listed medicines are active", is.at_least);
    for (word, list) in [
        ("with the evidence", &is.evidence),
        ("of the group", &is.groups),
        ("namely", &is.substances),
    ] {
        if !list.is_empty() {
            let _ = write!(text, " {word} {}", names(list));
        }
    }
    if !is.routes.is_empty() {
        let _ = write!(text, " by {}", words::list(&is.routes));
    }
    if let Some(h) = is.started_within_h {
        let _ = write!(text, ", started within {} h", h.0);
    }
    if let Some(n) = is.within_half_lives_of_start {
        let _ = write!(text, ", within {} half-lives of the start", n.0);
    }
    text
}

fn span(time: TimeDelta) -> String {
    let minutes = time.num_minutes();
    match minutes {
        m if m % 1440 == 0 && m >= 2880 => format!("{} days", m / 1440),
        m if m % 60 == 0 => format!("{} h", m / 60),
        m => format!("{m} min"),
    }
}

fn clock(time: NaiveTime) -> String {
    time.format("%H:%M").to_string()
}
