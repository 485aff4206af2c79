//! What people ask of the desk.

use super::super::book::When;
use super::super::life::{Event, Refusal};
use super::super::watch::watch_id;
use super::super::words;
use super::Desk;
use crate::record::{
    Adoption, AlarmId, Command, CommandKind, Reply, Stamp, Suppression, Transition, TransitionKind,
};

impl Desk {
    /// What adopting an alarm's finding means. The keeper puts it into the command before journalling it, so that the
    /// journal alone says what was adopted.
    ///
    /// # Errors
    /// The alarm cannot be adopted; the reason and the mend in words.
    pub fn adoption(&self, alarm: &AlarmId, occurrence: u32) -> Result<Adoption, String> {
        self.occurrence(alarm, occurrence)?;
        if *alarm != watch_id() {
            return Err(format!(
                "{alarm} is no finding of the watch; only `{}` can be adopted",
                watch_id()
            ));
        }
        self.state
            .watch
            .adoption(&self.state.book)
            .map_err(|why| format!("{alarm} cannot be adopted: {why}"))
    }

    /// Does what a person asks. An adoption is taken from the command as journalled; without one it is refused.
    pub fn person(&mut self, command: &Command, wall: Stamp) -> (Vec<Transition>, Reply) {
        let done = match &command.kind {
            CommandKind::Show => Err("showing the state needs no journal entry".to_owned()),
            CommandKind::Acknowledge { alarm, occurrence } => {
                self.acknowledge(alarm, *occurrence, command, wall)
            }
            CommandKind::Shelve { .. }
            | CommandKind::Unshelve { .. }
            | CommandKind::TakeOut { .. }
            | CommandKind::PutBack { .. }
            | CommandKind::Reset { .. } => self.hold(command, wall),
            CommandKind::Adopt {
                alarm,
                occurrence,
                adoption,
            } => self.adopt(alarm, *occurrence, adoption.as_ref(), command, wall),
        };
        match done {
            Ok((transition, text)) => (transition.into_iter().collect(), Reply::Done { text }),
            Err(why) => (Vec::new(), Reply::Refused { why }),
        }
    }

    fn acknowledge(
        &mut self,
        id: &AlarmId,
        occurrence: u32,
        command: &Command,
        wall: Stamp,
    ) -> Result<(Option<Transition>, String), String> {
        self.occurrence(id, occurrence)?;
        let when = When {
            at: wall,
            recorded: wall,
        };
        match self.state.book.act(
            id,
            Some(&Event::Acknowledge),
            TransitionKind::Acknowledged,
            when,
            Some(&command.by),
            &command.note,
        ) {
            Ok(t) => {
                let text = format!("{id} occurrence {occurrence} is {}", t.alarm.state().name());
                Ok((Some(t), text))
            }
            Err(Refusal::AlreadyAcknowledged) => Ok((
                None,
                format!("{id} occurrence {occurrence} was acknowledged before"),
            )),
            Err(why) => Err(format!("{id} cannot be acknowledged: {why}")),
        }
    }

    /// Holds an alarm back, brings it back, or resets it.
    fn hold(
        &mut self,
        command: &Command,
        wall: Stamp,
    ) -> Result<(Option<Transition>, String), String> {
        let (id, occurrence) = match &command.kind {
            CommandKind::Shelve {
                alarm, occurrence, ..
            }
            | CommandKind::Unshelve { alarm, occurrence }
            | CommandKind::TakeOut { alarm, occurrence }
            | CommandKind::PutBack { alarm, occurrence }
            | CommandKind::Reset { alarm, occurrence } => (alarm, *occurrence),
            _ => return Err("this holds nothing back".to_owned()),
        };
        self.occurrence(id, occurrence)?;
        let held = self.state.book.get(id).map(|a| a.suppression.clone());
        let held = held.unwrap_or(Suppression::None);
        let why = !command.note.trim().is_empty();
        let (event, kind) = match &command.kind {
            CommandKind::Shelve { until, .. } => {
                let longest = self.settings.care.shelve_at_most;
                let span = until.seconds() - wall.seconds();
                if !why {
                    return Err("say why it is shelved: a note is due".to_owned());
                }
                if span <= 0.0 {
                    return Err(format!("{until} is over; give an instant to come"));
                }
                if span > longest {
                    return Err(format!(
                        "an alarm is shelved for at most {}; to hold it back for longer take it out of service",
                        words::duration(longest)
                    ));
                }
                if !matches!(held, Suppression::None | Suppression::Shelved { .. }) {
                    return Err(format!("{id} is held back already; bring it back first"));
                }
                (Event::Shelve { until: *until }, TransitionKind::Shelved)
            }
            CommandKind::TakeOut { .. } => {
                if !why {
                    return Err("say why it is taken out of service: a note is due".to_owned());
                }
                if held == Suppression::OutOfService {
                    return Err(format!("{id} is out of service already"));
                }
                (Event::TakeOut, TransitionKind::TakenOut)
            }
            CommandKind::Unshelve { .. } => {
                if !matches!(held, Suppression::Shelved { .. }) {
                    return Err(format!("{id} is not shelved"));
                }
                (Event::Release, TransitionKind::Unshelved)
            }
            CommandKind::PutBack { .. } => {
                if held != Suppression::OutOfService {
                    return Err(format!("{id} is not out of service"));
                }
                (Event::Release, TransitionKind::PutBack)
            }
            _ => (Event::Reset, TransitionKind::Reset),
        };
        let when = When {
            at: wall,
            recorded: wall,
        };
        let transition = self
            .state
            .book
            .act(
                id,
                Some(&event),
                kind,
                when,
                Some(&command.by),
                &command.note,
            )
            .map_err(|why| format!("{id}: {why}"))?;
        let text = match &command.kind {
            CommandKind::Shelve { until, .. } => {
                format!("{id} is shelved until {}", words::minute(*until))
            }
            _ => format!("{id} is {}", transition.alarm.state().name()),
        };
        Ok((Some(transition), text))
    }

    fn adopt(
        &mut self,
        id: &AlarmId,
        occurrence: u32,
        adoption: Option<&Adoption>,
        command: &Command,
        wall: Stamp,
    ) -> Result<(Option<Transition>, String), String> {
        self.adoption(id, occurrence)?;
        let adoption = adoption
            .ok_or_else(|| format!("{id} cannot be adopted: the command holds no adoption"))?;
        let when = When {
            at: wall,
            recorded: wall,
        };
        let transition = self
            .state
            .book
            .act(
                id,
                Some(&Event::Adopt),
                TransitionKind::Adopted,
                when,
                Some(&command.by),
                &command.note,
            )
            .map_err(|why| format!("{id} cannot be adopted: {why}"))?;
        self.state.watch.adopted();
        let text = format!(
            "{} is adopted as {} from block {} on; the watch goes on past it",
            id,
            adoption.cause.name(),
            adoption.block
        );
        Ok((Some(transition), text))
    }

    /// Checks that a person means the alarm as it stands now.
    fn occurrence(&self, id: &AlarmId, occurrence: u32) -> Result<(), String> {
        let alarm = self.state.book.get(id).ok_or_else(|| {
            let known: Vec<&str> = self.alarms().map(|a| a.id.0.as_str()).collect();
            if known.is_empty() {
                format!("there is no alarm {id}, and none has come so far")
            } else {
                format!("there is no alarm {id}; there are {}", known.join(", "))
            }
        })?;
        match occurrence.cmp(&alarm.occurrence) {
            std::cmp::Ordering::Equal => Ok(()),
            std::cmp::Ordering::Less => Err(format!(
                "occurrence {occurrence} of {id} is over; it is occurrence {} now: {}",
                alarm.occurrence, alarm.summary
            )),
            std::cmp::Ordering::Greater => Err(format!(
                "{id} has come {} times, there is no occurrence {occurrence}",
                alarm.occurrence
            )),
        }
    }
}
