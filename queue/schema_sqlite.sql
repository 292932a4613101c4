create table meta (
    key   text primary key not null,
    value text not null
);

create table frame (
    id           integer primary key autoincrement,
    station      text    not null,
    arm          text    not null,
    path         text    not null,
    size         integer not null,
    mtime_ns     integer not null,
    stamp_ns     integer not null,
    has_time     integer not null,
    shot_no      integer not null,
    has_shot     integer not null,
    stamp_source text    not null,
    weak         integer not null,
    state        text    not null,
    reason       text    not null,
    shot_id      integer,
    seen_ns      integer not null,
    unique (station, arm, path)
);
create index frame_state on frame (station, state, seen_ns);
create index frame_shot on frame (shot_id);

create table shot (
    id              integer primary key autoincrement,
    station         text    not null,
    name            text    not null,
    taken_ns        integer not null,
    streak_frame    integer unique,
    reference_frame integer unique,
    streak_path     text    not null,
    reference_path  text    not null,
    gap_ns          integer not null default 0,
    state           text    not null,
    reason          text    not null default '',
    verdict         text    not null default '',
    summary         text    not null default '',
    result_dir      text    not null default '',
    shown_pass      text    not null default '',
    shown_bundle    text    not null default '',
    bundle_id       text    not null default '',
    replaced        integer not null default 0,
    created_ns      integer not null,
    updated_ns      integer not null,
    done_ns         integer not null default 0
);
create unique index shot_name on shot (station, name) where streak_frame is not null;
create index shot_taken on shot (taken_ns, id);
create index shot_station_taken on shot (station, taken_ns, id);
create index shot_state_taken on shot (state, taken_ns, id);
create index shot_station_state_taken on shot (station, state, taken_ns, id);
create index shot_verdict_taken on shot (verdict, taken_ns, id);
create index shot_done on shot (done_ns) where done_ns > 0;

create table work (
    shot_id    integer not null,
    pass       text    not null,
    bundle_id  text    not null,
    job_id     integer not null,
    state      text    not null,
    tries      integer not null,
    attempt_id integer not null,
    suspect    integer not null,
    queued_ns  integer not null,
    next_ns    integer not null,
    reason     text    not null,
    primary key (shot_id, pass)
);
create index work_state on work (state, pass, queued_ns);
create index work_suspect on work (suspect) where suspect = 1;

create table attempt (
    id         integer primary key autoincrement,
    shot_id    integer not null,
    pass       text    not null,
    bundle_id  text    not null,
    number     integer not null,
    started_ns integer not null,
    ended_ns   integer not null default 0,
    outcome    text    not null default '',
    error      text    not null default '',
    host       text    not null
);
create index attempt_shot on attempt (shot_id, id);
create index attempt_open on attempt (ended_ns) where ended_ns = 0;
