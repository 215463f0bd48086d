//! From the file as written to a checked protocol: names that must exist, numbers that must fit, roles that must be
//! reachable at every hour.

use super::condition::{Condition, Limit, QtcIs};
use super::file::{File, QuietIs, RosterRow, RuleIs, TierIs, WatchIs};
use super::{Protocol, ReadingRule, RosterEntry, Rule, TechnicalTier, Tier, Watch, within};
use crate::finding::Finding;
use crate::ids::{ContentHash, Private, Role, RuleId, TierName, Ward};
use crate::routes;
use crate::view::span_h;
use chrono::{NaiveDate, NaiveTime, TimeDelta};
use std::collections::BTreeSet;
use toml::Spanned;

const LEADS: [&str; 12] =
    ["I", "II", "III", "aVR", "aVL", "aVF", "V1", "V2", "V3", "V4", "V5", "V6"];

/// Collects mistakes and knows the text they stand in.
struct Check<'t> {
    text: &'t str,
    wrong: Vec<Finding>,
}

pub(super) fn checked(text: &str, file: File) -> Result<Protocol, Vec<Finding>> {
    let mut check = Check { text, wrong: Vec::new() };
    let roles: BTreeSet<String> =
        file.roster.iter().map(|row| row.as_ref().role.as_ref().clone()).collect();
    let tier_names: Vec<String> =
        file.tier.iter().map(|tier| tier.as_ref().name.as_ref().clone()).collect();
    let zone = check.zone(&file.protocol.zone);
    let approved = check.approval(&file);
    let mut shown = vec![file.reading.formula];
    shown.extend(
        file.reading.shown.iter().copied().filter(|formula| *formula != file.reading.formula),
    );
    let lead = check.lead(&file.reading.lead);
    let wide_qrs_tier = check.tier(&tier_names, &file.wide_qrs.highest_tier);
    let technical = TechnicalTier {
        tier: check.tier(&tier_names, &file.technical.tier),
        tell: check.roles(&roles, &file.technical.tell),
        to_do: file.technical.to_do.clone(),
    };
    if file.technical.tell.is_empty() {
        check.add(
            file.technical.tier.span().start,
            "nobody is told of technical trouble",
            "technical.tell names at least one role",
        );
    }
    let limits = file.limits;
    let watch_ids: BTreeSet<String> =
        file.watch.iter().map(|watch| watch.as_ref().id.as_ref().clone()).collect();
    let names = Names { tiers: &tier_names, limits: &limits, watches: &watch_ids };
    let count = file.tier.len();
    let tiers: Vec<Tier> = file
        .tier
        .into_iter()
        .enumerate()
        .map(|(rank, tier)| check.tier_is(&roles, &tier_names, tier, rank, rank + 1 == count))
        .collect();
    if tiers.is_empty() {
        check.add(0, "there is no tier", "write at least one [[tier]], lowest first");
    }
    let mut seen = BTreeSet::new();
    let rules = file.rule.into_iter().map(|rule| check.rule(&names, &mut seen, rule)).collect();
    let mut seen = BTreeSet::new();
    let watches = file.watch.into_iter().map(|watch| check.watch(&mut seen, watch)).collect();
    let roster: Vec<RosterEntry> = file.roster.into_iter().map(|row| check.roster(row)).collect();
    check.always_reached(&tiers, &technical, &roster);
    let protocol = Protocol {
        name: file.protocol.name,
        version: file.protocol.version,
        hash: ContentHash::of(text.as_bytes()),
        approved,
        zone,
        reading: ReadingRule {
            formula: file.reading.formula,
            t_end: file.reading.t_end,
            lead,
            shown,
        },
        baseline_within: minutes(file.baseline.before_first_medicine_within_days.0 * 1440.0),
        active_half_lives: file.medicines.active_half_lives.0,
        unknown_half_life: minutes(file.medicines.unknown_half_life_h.0 * 60.0),
        orders: file.medicines.orders,
        stale_after: minutes(file.results.stale_after_h.0 * 60.0),
        albumin_within: minutes(file.results.albumin_within_h.0 * 60.0),
        tisdale: file.tisdale,
        wide_qrs_ms: file.wide_qrs.from_ms.0,
        wide_qrs_tier,
        over_read_doubt_ms: file.over_read.doubt_ms.0,
        limits,
        silent_after: file
            .feeds
            .into_iter()
            .map(|(feed, is)| (feed, minutes(is.silent_after_h.0 * 60.0)))
            .collect(),
        technical,
        tiers,
        intents: file.intents,
        roster,
        watches,
        rules,
    };
    if check.wrong.is_empty() { Ok(protocol) } else { Err(check.wrong) }
}

/// What a rule may name.
struct Names<'a> {
    tiers: &'a [String],
    limits: &'a std::collections::BTreeMap<String, super::LimitBySex>,
    watches: &'a BTreeSet<String>,
}

impl Check<'_> {
    fn add(&mut self, offset: usize, message: impl Into<String>, hint: impl Into<String>) {
        self.wrong.push(Finding::at(self.text, offset, message).hint(hint));
    }

    fn zone(&mut self, zone: &Spanned<String>) -> chrono_tz::Tz {
        zone.as_ref().parse().unwrap_or_else(|_| {
            self.add(
                zone.span().start,
                format!("`{}` is not a time zone", zone.as_ref()),
                "write for example \"Europe/London\"",
            );
            chrono_tz::UTC
        })
    }

    /// `None` for the global reading.
    fn lead(&mut self, lead: &Spanned<String>) -> Option<String> {
        let name = lead.as_ref().as_str();
        let is = |known: &&str| known.eq_ignore_ascii_case(name);
        if name.eq_ignore_ascii_case("global") {
            return None;
        }
        if !LEADS.iter().any(is) {
            self.add(
                lead.span().start,
                format!("`{name}` is neither `global` nor one of the twelve leads"),
                format!("write \"global\", or one of {}", LEADS.join(", ")),
            );
        }
        Some(name.to_owned())
    }

    fn approval(&mut self, file: &File) -> Option<(String, NaiveDate)> {
        let head = &file.protocol;
        let by = head.approved_by.as_ref().filter(|by| !by.as_ref().trim().is_empty());
        match (by, &head.approved_on) {
            (None, None) => None,
            (Some(by), Some(on)) => {
                let date = on.as_ref().date.filter(|_| on.as_ref().time.is_none()).and_then(|d| {
                    NaiveDate::from_ymd_opt(i32::from(d.year), u32::from(d.month), u32::from(d.day))
                });
                if date.is_none() {
                    self.add(
                        on.span().start,
                        "`approved_on` is not a plain date",
                        "write 2027-01-31",
                    );
                }
                date.map(|date| (by.as_ref().clone(), date))
            }
            (Some(by), None) => {
                self.add(
                    by.span().start,
                    "the protocol is approved without a date",
                    "write `approved_on = 2027-01-31` beside it",
                );
                None
            }
            (None, Some(on)) => {
                self.add(
                    on.span().start,
                    "the protocol has a date of approval and nobody who approved it",
                    "write `approved_by = \"name\"` beside it",
                );
                None
            }
        }
    }

    fn tier(&mut self, tiers: &[String], name: &Spanned<String>) -> usize {
        tiers.iter().position(|tier| tier == name.as_ref()).unwrap_or_else(|| {
            self.add(
                name.span().start,
                format!("there is no tier `{}`", name.as_ref()),
                format!("tiers are: {}", tiers.join(", ")),
            );
            0
        })
    }

    fn roles(&mut self, known: &BTreeSet<String>, names: &[Spanned<String>]) -> Vec<Role> {
        for name in names.iter().filter(|name| !known.contains(name.as_ref())) {
            let roles = known.iter().map(String::as_str).collect::<Vec<_>>().join(", ");
            self.add(
                name.span().start,
                format!("no roster entry reaches the role `{}`", name.as_ref()),
                format!("the roster reaches: {roles}"),
            );
        }
        names.iter().map(|name| Role::new(name.as_ref().as_str())).collect()
    }

    fn time(&mut self, text: &Spanned<String>) -> NaiveTime {
        NaiveTime::parse_from_str(text.as_ref(), "%H:%M").unwrap_or_else(|_| {
            self.add(
                text.span().start,
                format!("`{}` is not a time of day", text.as_ref()),
                "write for example \"07:30\"",
            );
            NaiveTime::MIN
        })
    }

    fn hours(&mut self, from: &Spanned<String>, to: &Spanned<String>) -> (NaiveTime, NaiveTime) {
        let hours = (self.time(from), self.time(to));
        if hours.0 == hours.1 {
            self.add(
                from.span().start,
                "from and to are the same time, so the hours are empty",
                "leave both out for always",
            );
        }
        hours
    }

    fn tier_is(
        &mut self,
        roles: &BTreeSet<String>,
        names: &[String],
        tier: Spanned<TierIs>,
        rank: usize,
        highest: bool,
    ) -> Tier {
        let at = tier.span().start;
        let tier = tier.into_inner();
        if names.iter().take(rank).any(|name| name == tier.name.as_ref()) {
            self.add(
                tier.name.span().start,
                format!("the tier `{}` stands twice", tier.name.as_ref()),
                "give each tier a name of its own",
            );
        }
        if tier.to_do.trim().is_empty() {
            self.add(
                at,
                format!("the tier `{}` does not say what to do", tier.name.as_ref()),
                "write the hospital's own words in `to_do`",
            );
        }
        if tier.answer_within_min.is_some() && tier.then.is_empty() {
            self.add(
                at,
                format!("nobody follows when `{}` is not answered in time", tier.name.as_ref()),
                "`then` names the roles told next",
            );
        }
        if tier.answer_within_min.is_some() && tier.tell.is_empty() {
            self.add(
                at,
                format!("`{}` wants an answer and tells nobody", tier.name.as_ref()),
                "`tell` names the roles told at once",
            );
        }
        if tier.answer_within_min.is_none() && !tier.then.is_empty() {
            self.add(
                at,
                format!(
                    "`{}` names roles to tell next and no time after which",
                    tier.name.as_ref()
                ),
                "write `answer_within_min`",
            );
        }
        if highest && tier.answer_within_min.is_none() {
            self.add(
                at,
                format!("the highest tier, `{}`, wants no answer", tier.name.as_ref()),
                "write `answer_within_min` and `then`: an unanswered alert must go on",
            );
        }
        let quiet = tier.quiet.map(|quiet| {
            let at = quiet.span().start;
            let QuietIs { from, to } = quiet.into_inner();
            if highest {
                self.add(
                    at,
                    format!("the highest tier, `{}`, may not wait", tier.name.as_ref()),
                    "leave `quiet` out of it",
                );
            }
            self.hours(&from, &to)
        });
        Tier {
            tell: self.roles(roles, &tier.tell),
            then: self.roles(roles, &tier.then),
            name: TierName::new(tier.name.into_inner()),
            to_do: tier.to_do,
            answer_within: tier.answer_within_min.map(|min| minutes(min.0)),
            quiet,
        }
    }

    fn roster(&mut self, row: Spanned<RosterRow>) -> RosterEntry {
        let at = row.span().start;
        let row = row.into_inner();
        let hours = match (&row.from, &row.to) {
            (Some(from), Some(to)) => Some(self.hours(from, to)),
            (None, None) => None,
            _ => {
                self.add(
                    at,
                    "a roster entry has one end of its hours",
                    "write both `from` and `to`, or neither for always",
                );
                None
            }
        };
        if row.mail.is_empty() {
            self.add(
                at,
                format!("the roster entry of `{}` has no address", row.role.as_ref()),
                "`mail` names at least one",
            );
        }
        for mail in &row.mail {
            let plain = mail
                .as_ref()
                .split_once('@')
                .is_some_and(|(who, host)| !who.is_empty() && host.contains('.'));
            if !plain || mail.as_ref().chars().any(char::is_whitespace) {
                self.add(
                    mail.span().start,
                    "this is not a mail address",
                    "write for example \"tern-nurse@saltmarsh.example\"",
                );
            }
        }
        RosterEntry {
            role: Role::new(row.role.into_inner()),
            wards: row.wards.into_iter().map(Ward::new).collect(),
            hours,
            mail: row.mail.into_iter().map(|mail| Private::new(mail.into_inner())).collect(),
        }
    }

    /// Every role that is told must be reached on a ward that the roster doesn't name, at every minute of the day.
    fn always_reached(
        &mut self,
        tiers: &[Tier],
        technical: &TechnicalTier,
        roster: &[RosterEntry],
    ) {
        let told: BTreeSet<&Role> = tiers
            .iter()
            .flat_map(|tier| tier.tell.iter().chain(&tier.then))
            .chain(&technical.tell)
            .collect();
        for role in told {
            let entries: Vec<_> = roster
                .iter()
                .filter(|entry| entry.role == *role && entry.wards.is_empty())
                .collect();
            let gap = (0..1440)
                .filter_map(|minute| NaiveTime::from_hms_opt(minute / 60, minute % 60, 0))
                .find(|time| {
                    !entries
                        .iter()
                        .any(|entry| entry.hours.is_none_or(|hours| within(hours, *time)))
                });
            if let Some(time) = gap.filter(|_| roster.iter().any(|entry| entry.role == *role)) {
                let at = self.text.find("[[roster]]").unwrap_or(0);
                self.add(
                    at,
                    format!(
                        "at {} nobody is reached as `{role}` on a ward without an entry of its own",
                        time.format("%H:%M")
                    ),
                    "add a [[roster]] entry for the role without `wards`, `from` and `to`",
                );
            }
        }
    }

    fn watch(&mut self, seen: &mut BTreeSet<String>, watch: Spanned<WatchIs>) -> Watch {
        let at = watch.span().start;
        let watch = watch.into_inner();
        if !seen.insert(watch.id.as_ref().clone()) {
            self.add(
                watch.id.span().start,
                format!("the watch `{}` stands twice", watch.id.as_ref()),
                "give each watch an id of its own",
            );
        }
        let asks = watch.before_first_dose_within_h.is_some()
            || !watch.after_start_h.is_empty()
            || !watch.after_dose_change_h.is_empty()
            || watch.after_each_of_first_doses.is_some()
            || watch.at_steady_state
            || watch.then_every_h.is_some();
        if !asks {
            self.add(
                at,
                format!("the watch `{}` says no time at which it asks", watch.id.as_ref()),
                "write for example `after_start_h = [24]`",
            );
        }
        let hours = |h: super::condition::Positive| minutes(h.0 * 60.0);
        Watch {
            id: watch.id.into_inner(),
            asks_for: watch.asks_for,
            evidence: watch.evidence,
            groups: watch.groups,
            substances: watch.substances,
            before_first_dose: watch.before_first_dose_within_h.map(hours),
            after_start: watch.after_start_h.into_iter().map(hours).collect(),
            after_dose_change: watch.after_dose_change_h.into_iter().map(hours).collect(),
            after_doses: watch.after_each_of_first_doses.map(|each| (each.n, hours(each.h))),
            at_steady_state: watch.at_steady_state,
            then_every: watch.then_every_h.map(hours),
            grace: hours(watch.grace_h),
        }
    }

    fn rule(
        &mut self,
        names: &Names<'_>,
        seen: &mut BTreeSet<String>,
        rule: Spanned<RuleIs>,
    ) -> Rule {
        let at = rule.span().start;
        let rule = rule.into_inner();
        if !seen.insert(rule.id.as_ref().clone()) {
            self.add(
                rule.id.span().start,
                format!("the rule `{}` stands twice", rule.id.as_ref()),
                "give each rule an id of its own",
            );
        }
        if rule.example.is_empty() {
            self.add(
                at,
                format!("the rule `{}` has no example", rule.id.as_ref()),
                "write a [[rule.example]] that fires and one that stays quiet",
            );
        }
        if rule.says.trim().is_empty() {
            self.add(
                at,
                format!("the rule `{}` does not say what was seen", rule.id.as_ref()),
                "write a sentence in `says`",
            );
        }
        for text in [Some(&rule.says), rule.to_do.as_ref()].into_iter().flatten() {
            self.wording(at, text);
        }
        if let Some(only_if) = &rule.only_if {
            self.condition(names, at, only_if);
        }
        self.condition(names, at, &rule.when);
        Rule {
            tier: self.tier(names.tiers, &rule.tier),
            borderline: rule
                .borderline
                .as_ref()
                .and_then(|name| self.tier_or_shown(names.tiers, name)),
            cannot_tell: rule
                .cannot_tell
                .as_ref()
                .and_then(|name| self.tier_or_shown(names.tiers, name)),
            id: RuleId::new(rule.id.into_inner()),
            concern: rule.concern.into_inner(),
            says: rule.says,
            to_do: rule.to_do,
            only_if: rule.only_if,
            when: rule.when,
            examples: rule.example.into_iter().map(Spanned::into_inner).collect(),
        }
    }

    /// Words that no message may carry, in whichever protocol.
    fn wording(&mut self, at: usize, text: &str) {
        let lower = text.to_lowercase();
        for word in ["stop the medicine", "is safe", "safe to"] {
            if lower.contains(word) {
                self.add(at, format!("a message may not say `{word}`"), "write for example \"review with pharmacist and prescriber, per local protocol\"");
            }
        }
    }

    fn tier_or_shown(&mut self, tiers: &[String], name: &Spanned<String>) -> Option<usize> {
        (name.as_ref() != "shown").then(|| self.tier(tiers, name))
    }

    #[allow(clippy::wildcard_enum_match_arm, reason = "the others can't be written wrongly")]
    fn condition(&mut self, names: &Names<'_>, at: usize, condition: &Condition) {
        match condition {
            Condition::All(of) | Condition::Any(of) | Condition::None(of) => {
                if of.is_empty() {
                    self.add(
                        at,
                        "an empty list of conditions decides nothing",
                        "name at least one condition, or leave it out",
                    );
                }
                for part in of {
                    self.condition(names, at, part);
                }
            }
            Condition::AtLeast(few) => {
                let n = *few.n.as_ref();
                if n == 0 || n > few.of.len() {
                    self.add(
                        few.n.span().start,
                        format!(
                            "at least {n} of {} conditions is always or never so",
                            few.of.len()
                        ),
                        "n lies between 1 and the number of conditions",
                    );
                }
                for part in &few.of {
                    self.condition(names, at, part);
                }
            }
            Condition::Qtc(qtc) => self.qtc(names, at, qtc),
            Condition::FormulasSplit(limit) => self.limit(names, at, limit),
            Condition::Rate(rate)
                if rate.below_per_min.is_none() && rate.above_per_min.is_none() =>
            {
                self.add(at, "`rate` asks nothing", "write `below_per_min` or `above_per_min`");
            }
            Condition::Electrolyte(is) => {
                let asked = [is.below_mmol_l, is.above_mmol_l, is.falling_by_mmol_l]
                    .into_iter()
                    .flatten()
                    .count();
                if asked != 1 {
                    self.add(
                        at,
                        "`electrolyte` asks one thing",
                        "write one of `below_mmol_l`, `above_mmol_l`, `falling_by_mmol_l`",
                    );
                }
                if is.falling_by_mmol_l.is_some() != is.within_h.is_some() {
                    self.add(at, "`falling_by_mmol_l` and `within_h` go together", "write both");
                }
            }
            Condition::Overdue(overdue) if !names.watches.contains(overdue.watch.as_ref()) => {
                let known = names.watches.iter().map(String::as_str).collect::<Vec<_>>().join(", ");
                self.add(
                    overdue.watch.span().start,
                    format!("there is no watch `{}`", overdue.watch.as_ref()),
                    format!("watches are: {known}"),
                );
            }
            Condition::Medicines(medicines) if medicines.at_least == 0 => {
                self.add(at, "at least 0 medicines is always so", "write 1 or more");
            }
            Condition::Medicines(medicines) => {
                for route in medicines.routes.iter().filter(|r| routes::usual(r).is_none()) {
                    let hint = format!("known are {}", routes::usual_ones());
                    self.add(at, format!("`{route}` is not a route that is known"), hint);
                }
            }
            _ => {}
        }
    }

    fn qtc(&mut self, names: &Names<'_>, at: usize, qtc: &QtcIs) {
        let asked = usize::from(qtc.at_least_ms.is_some())
            + usize::from(qtc.at_least.is_some())
            + usize::from(qtc.below_ms.is_some());
        if asked != 1 {
            self.add(
                at,
                "`qtc` asks one thing",
                "write one of `at_least_ms`, `at_least`, `below_ms`",
            );
        }
        self.limit_name(names, qtc.at_least.as_ref());
    }

    fn limit(&mut self, names: &Names<'_>, at: usize, limit: &Limit) {
        if limit.at_least_ms.is_some() == limit.at_least.is_some() {
            self.add(
                at,
                "`formulas_split` needs one limit",
                "write one of `at_least_ms`, `at_least`",
            );
        }
        self.limit_name(names, limit.at_least.as_ref());
    }

    fn limit_name(&mut self, names: &Names<'_>, name: Option<&Spanned<String>>) {
        if let Some(name) = name.filter(|name| !names.limits.contains_key(name.as_ref())) {
            let known = names.limits.keys().map(String::as_str).collect::<Vec<_>>().join(", ");
            self.add(
                name.span().start,
                format!("there is no limit `{}`", name.as_ref()),
                format!("[limits] names: {known}"),
            );
        }
    }
}

fn minutes(number: f64) -> TimeDelta {
    span_h(number.max(0.0) / 60.0)
}
