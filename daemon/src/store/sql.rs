//! Every statement, but for those over many rows (`rows`, `commit`). A test prepares each against the
//! migrated schema.

macro_rules! statements {
    ($($name:ident = $sql:literal;)*) => {
        $(pub(super) const $name: &str = $sql;)*
        #[cfg(test)]
        pub(super) const ALL: &[(&str, &str)] = &[$((stringify!($name), $sql)),*];
    };
}

statements! {
    // Opening
    VERSION = "select sqlite_version()";
    QUICK_CHECK = "pragma quick_check(20)";
    INTEGRITY_CHECK = "pragma integrity_check(100)";
    FOREIGN_KEY_CHECK = "select \"table\", rowid, parent from pragma_foreign_key_check";
    IS_EMPTY = "select count(*) = 0 from sqlite_schema";
    JOURNAL_MODE = "pragma journal_mode";
    SYNCHRONOUS = "pragma synchronous";
    FOREIGN_KEYS = "pragma foreign_keys";
    CHECKPOINT_LOG = "pragma wal_checkpoint(passive)";
    TRUNCATE_LOG = "pragma wal_checkpoint(truncate)";
    PAGES = "select (select page_size from pragma_page_size), (select page_count from pragma_page_count), (select freelist_count from pragma_freelist_count)";

    // Meta
    META = "select value from meta where key = ?1";
    SET_META = "insert into meta (key, value) values (?1, ?2) on conflict (key) do update set value = excluded.value";
    FORGET_META = "delete from meta where key = ?1";

    // Channels and readings
    CHANNELS = "select id, name from channel";
    ADD_CHANNEL = "insert into channel (id, name) values (?1, ?2)";
    NEWEST_OF_CHANNELS = "select id, (select max(sampled) from reading where channel = id) from channel";
    READINGS_OF = "select channel, sampled, epoch, received, value, raw, quality, device, clock from reading where arrival = ?1";
    READINGS_FROM = "select channel, sampled, epoch, received, value, raw, quality, device, clock from reading \
        where channel = ?1 and (sampled, epoch) >= (?2, ?3) and sampled < ?4 order by sampled, epoch limit ?5";
    NEWEST = "select channel, sampled, epoch, received, value, raw, quality, device, clock from reading \
        where channel = ?1 order by sampled desc, epoch desc limit 1";
    LAST_BEFORE = "select channel, sampled, epoch, received, value, raw, quality, device, clock from reading \
        where channel = ?1 and sampled < ?2 order by sampled desc, epoch desc limit 1";
    // What is no use is passed over here, not by asking again: a gauge may deliver nothing else for days.
    LAST_USABLE_BEFORE = "select channel, sampled, epoch, received, value, raw, quality, device, clock from reading \
        where channel = ?1 and sampled < ?2 and value is not null and quality not in (4, 9) \
        order by sampled desc, epoch desc limit 1";
    FIRST_SAMPLE = "select min((select min(sampled) from reading where channel = id)) from channel";
    LAST_SAMPLE = "select max((select max(sampled) from reading where channel = id)) from channel";
    REJECTED_AFTER = "select id, channel, source, sampled, received, raw, reason, detail from rejected where id > ?1 order by id limit ?2";

    // Journal
    LAST_SEQ = "select coalesce(max(seq), 0) from journal";
    ADD_ENTRY = "insert into journal (seq, wall, kind, payload) values (?1, ?2, ?3, ?4)";
    ENTRIES_AFTER = "select seq, wall, payload from journal where seq > ?1 order by seq limit ?2";
    ADD_STEP = "insert into step (block, revision, entry) \
        values (?1, (select coalesce(max(revision), 0) + 1 from step where block = ?1), ?2)";
    STEPS_BETWEEN = "select s.block, s.revision, j.seq, j.wall, j.payload from step s join journal j on j.seq = s.entry \
        where s.block >= ?1 and s.block < ?2 \
        and not exists (select 1 from step n where n.block = s.block and n.revision > s.revision) \
        order by s.block limit ?3";
    STEP_REVISIONS = "select s.block, s.revision, j.seq, j.wall, j.payload from step s join journal j on j.seq = s.entry \
        where s.block = ?1 order by s.revision";
    LAST_STEP = "select max(block) from step";

    // Desk, alarms, outbox
    DESK = "select position, state from desk";
    DESK_POSITION = "select coalesce((select position from desk), 0)";
    SET_DESK = "insert into desk (id, position, state) values (1, ?1, ?2) \
        on conflict (id) do update set position = excluded.position, state = excluded.state";
    ADD_TRANSITION = "insert into transition (position, alarm, occurrence, sequence, kind, at, recorded, person, note, body) \
        values (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10)";
    SET_ALARM = "insert or replace into alarm (id, kind, state, condition, acknowledgement, latch, suppression, \
        occurrence, sequence, priority, since, position, body) values (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12, ?13)";
    ALARMS = "select body from alarm order by id";
    ALARM_TABLE = "select id, kind, state, condition, acknowledgement, latch, suppression, occurrence, sequence, priority, since, body \
        from alarm order by id";
    TRANSITIONS_AFTER = "select id, kind, at, recorded, person, note, body from transition where id > ?1 order by id limit ?2";
    LAST_TRANSITION = "select coalesce(max(id), 0) from transition";
    LATEST_TRANSITIONS = "select id, kind, at, recorded, person, note, body from transition order by id desc limit ?1";
    TRANSITIONS_OF = "select id, kind, at, recorded, person, note, body from transition where alarm = ?1 order by id desc limit ?2";
    // A message sent again under its name takes a new number, so that a confirmation of the old one does not remove it.
    ADD_OUTBOX = "insert or replace into outbox (target, subject, occurrence, sequence, topic, payload, retain) \
        values (?1, ?2, ?3, ?4, ?5, ?6, ?7)";
    OUTBOX_AFTER = "select number, subject, occurrence, sequence, topic, payload, retain from outbox \
        where target = ?1 and number > ?2 order by number limit ?3";
    OUTBOX_COUNT = "select count(*) from outbox";
    OUTBOX_LAST = "select coalesce(max(number), 0) from outbox";
    SENT = "delete from outbox where target = ?1 and number = ?2";
    DROP_TARGET = "delete from outbox where target not in (select value from json_each(?1))";
    SET_RETAINED = "insert or replace into retained (topic, subject, occurrence, sequence, payload) values (?1, ?2, ?3, ?4, ?5)";
    RETAINED = "select topic, subject, occurrence, sequence, payload from retained order by topic";

    // Checkpoints and attempts
    SET_CHECKPOINT = "insert or replace into checkpoint (block, kind, at, created, fingerprint, state) values (?1, ?2, ?3, ?4, ?5, ?6)";
    CHECKPOINT_MARKS = "select block, kind, at from checkpoint";
    CHECKPOINT_BEFORE = "select block, kind, at, created, fingerprint, state from checkpoint \
        where block < ?1 and fingerprint = ?2 order by block desc limit 1";
    DROP_CHECKPOINT = "delete from checkpoint where block = ?1 and kind = ?2";
    DROP_CHECKPOINTS_FROM = "delete from checkpoint where block >= ?1";
    MARK_ATTEMPT = "insert into attempt (block, count) values (?1, 1) on conflict (block) do update set count = count + 1 returning count";
    ATTEMPTS = "select count from attempt where block = ?1";
    CLEAR_ATTEMPTS = "delete from attempt";

    // Retention
    OLDEST_CHUNK = "select max(sampled) from (select sampled from reading where channel = ?1 and sampled < ?2 order by sampled limit ?3)";
    LAST_ARRIVAL_UNTIL = "select coalesce(max(arrival), 0) from reading where channel = ?1 and sampled <= ?2";
    DROP_UNTIL = "delete from reading where channel = ?1 and sampled <= ?2";
    // A batch whose readings are all gone says no more than that it was. Nothing beyond the desk's position is touched, nor the
    // last entry, whose number the next one counts from.
    DROP_EMPTY_BATCHES = "delete from journal where seq in \
        (select seq from journal j where kind = 'batch' and seq <= ?1 and seq <= (select coalesce(max(position), 0) from desk) \
        and seq < (select max(seq) from journal) \
        and not exists (select 1 from reading where arrival = j.seq) order by seq limit ?2)";
    TRIM_OUTBOX = "delete from outbox where target = ?1 and number <= \
        (select number from outbox where target = ?1 order by number desc limit 1 offset ?2)";
    TRIM_REJECTED = "delete from rejected where id in \
        (select id from rejected where id <= (select max(id) from rejected) - ?1 or received < ?2 order by id limit ?3)";

    // Verifying
    STRAY_CHANNEL = "select count(*) from reading where channel not in (select id from channel)";
    SEQ_GAPS = "select count(*), coalesce(min(seq), 0), coalesce(max(seq), 0) from journal where seq > ?1";
    BATCH_ENTRIES = "select seq, payload, (select count(*) from reading where arrival = seq) from journal \
        where kind = 'batch' and seq > ?1 order by seq limit ?2";
    STRAY_ARRIVAL = "select count(*) from reading where arrival not in (select seq from journal where kind = 'batch')";
    ALARM_BEHIND = "select a.id from alarm a where a.body is not \
        (select t.body from transition t where t.alarm = a.id order by t.id desc limit 1) order by a.id";
    STRAY_TRANSITION = "select distinct alarm from transition where alarm not in (select id from alarm) order by alarm";
    STRAY_STEP = "select s.block from step s join journal j on j.seq = s.entry where j.kind <> 'judged' order by s.block";
}

/// Columns of a reading, as they are inserted.
pub(super) const INSERT_READINGS: &str = "insert into reading \
    (channel, sampled, epoch, received, value, raw, quality, device, clock, arrival) values";
/// Columns of a rejected delivery, as they are inserted.
pub(super) const INSERT_REJECTED: &str =
    "insert into rejected (channel, source, sampled, received, raw, reason, detail) values";
/// Looks up keys; `cross join` keeps the list outermost, so that each key is one seek.
pub(super) const HELD_HEAD: &str = "select r.channel, r.sampled, r.epoch, r.value from (values";
pub(super) const HELD_TAIL: &str = ") as k cross join reading r \
    on r.channel = k.column1 and r.sampled = k.column2 and r.epoch = k.column3";
