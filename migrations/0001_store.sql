-- The store of one site. Migrations are append-only: a released file never changes.
-- Instants are microseconds since 1970-01-01T00:00:00Z. Values are SI.

-- Small numbers for channel names, so that a reading stays short.
create table channel (
    id   integer primary key,
    name text not null unique
) strict;

-- The one ordered record of all that happened. `payload` is the whole entry as JSON.
create table journal (
    seq     integer primary key,
    wall    integer not null,
    kind    text    not null,
    payload text    not null
) strict;

-- `arrival` is the journal entry under which the reading was committed.
-- No foreign keys here: they cost two look-ups a row; `verify` checks both references.
create table reading (
    channel  integer not null,
    sampled  integer not null,
    epoch    integer not null,
    received integer not null,
    value    real,
    raw      real,
    quality  integer not null,
    device   integer not null,
    clock    integer not null,
    arrival  integer not null,
    primary key (channel, sampled, epoch)
) strict, without rowid;

create index reading_by_arrival on reading (arrival);

-- What was delivered and could not become a reading. The channel is kept by name: what comes from
-- outside must not be able to fill the table of channels.
create table rejected (
    id       integer primary key,
    channel  text,
    source   text    not null,
    sampled  integer,
    received integer not null,
    raw      text    not null,
    reason   text    not null,
    detail   text    not null
) strict;

-- What the watch said of a block, newest revision highest. The step itself is in the journal.
create table step (
    block    integer not null,
    revision integer not null,
    entry    integer not null references journal (seq),
    primary key (block, revision)
) strict, without rowid;

-- Alarms as they stand: the fields apart, and the whole alarm as JSON.
create table alarm (
    id              text    primary key,
    kind            text    not null,
    state           text    not null,
    condition       text    not null,
    acknowledgement text    not null,
    latch           text    not null,
    suppression     text    not null,
    occurrence      integer not null,
    sequence        integer not null,
    priority        text    not null,
    since           integer not null,
    position        integer not null,
    body            text    not null
) strict, without rowid;

-- The history of alarms: append-only. `body` is the alarm just after the step, as JSON.
create table transition (
    id         integer primary key,
    position   integer not null,
    alarm      text    not null,
    occurrence integer not null,
    sequence   integer not null,
    kind       text    not null,
    at         integer not null,
    recorded   integer not null,
    person     text,
    note       text    not null,
    body       text    not null
) strict;

create index transition_by_alarm on transition (alarm, id);

-- Messages not yet confirmed, once for each target; `number` is their order.
create table outbox (
    number     integer primary key autoincrement,
    target     text    not null,
    subject    text    not null,
    occurrence integer not null,
    sequence   integer not null,
    topic      text    not null,
    payload    text    not null,
    retain     integer not null,
    unique (target, subject, occurrence, sequence)
) strict;

create index outbox_by_target on outbox (target, number);

-- What a broker should hold, by topic; an empty payload is a topic to be cleared.
create table retained (
    topic      text    primary key,
    subject    text    not null,
    occurrence integer not null,
    sequence   integer not null,
    payload    text    not null
) strict, without rowid;

-- The state of the alarm desk after entry `position`; one row.
create table desk (
    id       integer primary key check (id = 1),
    position integer not null,
    state    blob    not null
) strict;

-- States of the watch after a block, kept on a ladder of ages. `at` is the block's end.
create table checkpoint (
    block       integer not null,
    kind        text    not null,
    at          integer not null,
    created     integer not null,
    fingerprint text    not null,
    state       blob    not null,
    unique (block, kind)
) strict;

-- How often a block was begun and not finished.
create table attempt (
    block integer primary key,
    count integer not null
) strict;

create table meta (
    key   text primary key,
    value text not null
) strict, without rowid;
