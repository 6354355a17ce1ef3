/*
 * trackhold.h - Trackhold's protocol for drives and small pose sources, in one C99 header.
 *
 * Copyright (c) 2026 the Trackhold authors
 * SPDX-License-Identifier: MIT
 *
 * You may use, copy, change and pass on this file, in products too, for free and without asking, as long as this notice
 * stays with it. It comes as it is: nobody promises that it works or suits your purpose, or answers for its use.
 *
 * What it needs: a C99 compiler with uint8_t and a double of 64 bits (IEEE 754 binary64). It calls no library function
 * but memcpy and memset, allocates nothing, keeps no state outside the structs you hand in, and any number of files may
 * include it. Bytes are put together one by one: byte order and alignment rules of the machine do not matter.
 *
 * What it does not do: sockets, clocks, wheels. A drive's main loop looks like this:
 *
 *     th_drive_init(&drive, &config, random_64_bits(), now_ns());
 *     for (;;) {
 *         while ((length = receive(bytes)) > 0)            // drain: of a burst only the last command counts
 *             th_drive_on_datagram(&drive, now_ns(), bytes, length);
 *         if ((length = th_drive_poll(&drive, now_ns(), bytes)) > 0)
 *             send(bytes, length);                         // renews the subscription
 *         th_drive_set_moving(&drive, wheels_turn());      // if the drive can measure it
 *         th_drive_output(&drive, now_ns(), &output);      // every turn of the loop: this is where time runs out
 *         drive_wheels(&output);
 *     }
 *
 * now_ns() is a clock of 64 bits that never goes back; extend a narrower one before handing it in. The duties behind
 * this are in PROTOCOL.md, section 6. This is no safety function: see the top of that page.
 */
#ifndef TRACKHOLD_H
#define TRACKHOLD_H

#include <float.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#if DBL_MANT_DIG != 53 || DBL_MAX_EXP != 1024
#error "trackhold.h needs a double of 64 bits; small compilers often have a switch for that"
#endif

enum {
    TH_HEADER_BYTES = 40,
    TH_TAG_BYTES = 16,
    TH_MAX_DATAGRAM_BYTES = 1200, /* the room a receive buffer needs */
    /* Whole datagrams, header included. */
    TH_POSE_BYTES = 88, TH_SUBSCRIBE_BYTES = 48, TH_TIME_REPLY_BYTES = 64
};

/* Kinds used here; PROTOCOL.md, section 2. */
enum { TH_KIND_POSE = 1, TH_KIND_SUBSCRIBE = 6, TH_KIND_TIME_REPLY = 9 };
enum { TH_KIND_COMMAND = 65, TH_KIND_SUBSCRIBED = 68, TH_KIND_TIME_REQUEST = 70 };
enum { TH_WANT_COMMANDS = 1, TH_WANT_JOURNAL = 2, TH_WANT_STATUS = 4 };

enum { TH_MODE_STANDBY, TH_MODE_TRACKING, TH_MODE_CONTROLLED_STOP, TH_MODE_PROTECTIVE_STOP, TH_MODE_EMERGENCY_STOP };

/* What the numbers of a command mean; those not named are 0, and no more than three are in use. */
enum {
    TH_NUMBERS = 3,
    TH_LAYOUT_BODY = 0,     /* speed m/s, turn rate rad/s */
    TH_LAYOUT_LEFT_RIGHT,   /* left and right wheel, rad/s */
    TH_LAYOUT_SPEED_STEER,  /* speed m/s of the rear axle's midpoint, steering angle rad */
    TH_LAYOUT_ACKERMANN,    /* the same speed, steering angles rad of the left and of the right front wheel */
    TH_LAYOUT_STEERED_WHEEL /* rim speed m/s and steering angle rad of the one wheel that drives and steers */
};

/* Whether number `at` of a command is a steering angle, which zero holds; the others are speeds. */
static inline int th_layout_is_angle(uint32_t layout, unsigned at)
{
    return (at == 1 && layout >= TH_LAYOUT_SPEED_STEER) || (at == 2 && layout == TH_LAYOUT_ACKERMANN);
}

/* What the reading functions return. */
typedef enum th_read {
    TH_READ_OK = 0,
    TH_READ_LENGTH,    /* too short, too long, or not as long as stated */
    TH_READ_MAGIC,     /* not a binary datagram of this protocol */
    TH_READ_VERSION,   /* another version of it */
    TH_READ_RESERVED,  /* reserved bytes are not zero */
    TH_READ_KIND,      /* another kind of message */
    TH_READ_VALUE,     /* a number that stands for nothing */
    TH_READ_NOT_FINITE /* NaN or infinite */
} th_read;

typedef struct th_header {
    uint8_t kind;
    uint16_t payload_bytes;
    uint64_t session, sequence, stamp_ns;
} th_header;

typedef struct th_command {
    uint32_t mode, layout;
    uint64_t valid_ns;
    double speed_m_s, turn_rate_rad_s;
    double wheels[4];
} th_command;

typedef struct th_pose {
    uint64_t measured_ns;
    double x_m, y_m, heading_rad;
    double position_sd_m, heading_sd_rad; /* 0 if not known */
} th_pose;

typedef struct th_subscribed {
    uint8_t boot[16];
    uint32_t want, lease_ms;
    uint64_t oldest_entry, next_entry;
} th_subscribed;

static inline uint64_t th_load(const uint8_t *from, unsigned bytes)
{
    uint64_t value = 0;
    while (bytes > 0)
        value = (value << 8) | from[--bytes];
    return value;
}

static inline void th_store(uint8_t *to, uint64_t value, unsigned bytes)
{
    unsigned at;
    for (at = 0; at < bytes; at++, value >>= 8)
        to[at] = (uint8_t)(value & 0xFFu);
}

static inline double th_load_f64(const uint8_t *from)
{
    uint64_t bits = th_load(from, 8);
    double value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

static inline void th_store_f64(uint8_t *to, double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    th_store(to, bits, 8);
}

/* By its bits, because some compilers assume that NaN never happens. */
static inline int th_finite(double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    return ((bits >> 52) & 0x7FFu) != 0x7FFu;
}

static inline void th_header_write(uint8_t *to, const th_header *header)
{
    th_store(to, 0x484B54A7u, 4); /* A7 54 4B 48 */
    to[4] = 1;
    to[5] = header->kind;
    th_store(to + 6, header->payload_bytes, 2);
    th_store(to + 8, header->session, 8);
    th_store(to + 16, header->sequence, 8);
    th_store(to + 24, header->stamp_ns, 8);
    th_store(to + 32, 0, 8); /* key id and reserved */
}

/* Reads the header and checks the datagram's length; the payload begins TH_HEADER_BYTES behind `bytes`. */
static inline th_read th_header_read(const uint8_t *bytes, size_t length, th_header *header)
{
    size_t rest;
    if (length < TH_HEADER_BYTES || length > TH_MAX_DATAGRAM_BYTES)
        return TH_READ_LENGTH;
    if (th_load(bytes, 4) != 0x484B54A7u)
        return TH_READ_MAGIC;
    if (bytes[4] != 1)
        return TH_READ_VERSION;
    if (th_load(bytes + 36, 4) != 0)
        return TH_READ_RESERVED;
    header->kind = bytes[5];
    header->payload_bytes = (uint16_t)th_load(bytes + 6, 2);
    header->session = th_load(bytes + 8, 8);
    header->sequence = th_load(bytes + 16, 8);
    header->stamp_ns = th_load(bytes + 24, 8);
    rest = length - TH_HEADER_BYTES;
    if (rest != header->payload_bytes && rest != (size_t)header->payload_bytes + TH_TAG_BYTES)
        return TH_READ_LENGTH;
    return TH_READ_OK;
}

/* The header of a datagram whose payload has to be of `kind` and `payload_bytes` long. */
static inline th_read th_expect(const uint8_t *bytes, size_t length, uint8_t kind, uint16_t payload_bytes,
                                th_header *header)
{
    th_read read = th_header_read(bytes, length, header);
    if (read != TH_READ_OK)
        return read;
    if (header->kind != kind)
        return TH_READ_KIND;
    return header->payload_bytes == payload_bytes ? TH_READ_OK : TH_READ_LENGTH;
}

/* Decodes a wheel command. On TH_READ_OK every number in it is finite. */
static inline th_read th_command_read(const uint8_t *bytes, size_t length, th_header *header, th_command *out)
{
    const uint8_t *payload;
    unsigned at;
    th_read read = th_expect(bytes, length, TH_KIND_COMMAND, 64, header);
    if (read != TH_READ_OK)
        return read;
    payload = bytes + TH_HEADER_BYTES;
    out->mode = (uint32_t)th_load(payload, 4);
    out->layout = (uint32_t)th_load(payload + 4, 4);
    out->valid_ns = th_load(payload + 8, 8);
    out->speed_m_s = th_load_f64(payload + 16);
    out->turn_rate_rad_s = th_load_f64(payload + 24);
    for (at = 0; at < 4; at++)
        out->wheels[at] = th_load_f64(payload + 32 + 8 * at);
    if (out->mode > TH_MODE_EMERGENCY_STOP || out->layout > TH_LAYOUT_STEERED_WHEEL)
        return TH_READ_VALUE;
    if (!th_finite(out->speed_m_s) || !th_finite(out->turn_rate_rad_s))
        return TH_READ_NOT_FINITE;
    for (at = 0; at < 4; at++)
        if (!th_finite(out->wheels[at]))
            return TH_READ_NOT_FINITE;
    return TH_READ_OK;
}

/* Decodes the answer to a subscription. */
static inline th_read th_subscribed_read(const uint8_t *bytes, size_t length, th_header *header, th_subscribed *out)
{
    const uint8_t *payload;
    th_read read = th_expect(bytes, length, TH_KIND_SUBSCRIBED, 40, header);
    if (read != TH_READ_OK)
        return read;
    payload = bytes + TH_HEADER_BYTES;
    memcpy(out->boot, payload, 16);
    out->want = (uint32_t)th_load(payload + 16, 4);
    out->lease_ms = (uint32_t)th_load(payload + 20, 4);
    out->oldest_entry = th_load(payload + 24, 8);
    out->next_entry = th_load(payload + 32, 8);
    return TH_READ_OK;
}

/* Decodes a time request. */
static inline th_read th_time_request_read(const uint8_t *bytes, size_t length, th_header *header, uint64_t *sent_ns)
{
    th_read read = th_expect(bytes, length, TH_KIND_TIME_REQUEST, 8, header);
    if (read == TH_READ_OK)
        *sent_ns = th_load(bytes + TH_HEADER_BYTES, 8);
    return read;
}

static inline void th_begin(uint8_t *to, uint8_t kind, uint16_t payload_bytes, uint64_t session, uint64_t sequence,
                            uint64_t stamp_ns)
{
    const th_header header = {kind, payload_bytes, session, sequence, stamp_ns};
    th_header_write(to, &header);
}

/* Writes a subscription into `to`, which has room for TH_SUBSCRIBE_BYTES, and returns that length. */
static inline size_t th_subscribe_write(uint8_t *to, uint64_t session, uint64_t sequence, uint64_t stamp_ns,
                                        uint32_t want, uint32_t lease_ms)
{
    th_begin(to, TH_KIND_SUBSCRIBE, 8, session, sequence, stamp_ns);
    th_store(to + 40, want, 4);
    th_store(to + 44, lease_ms, 4);
    return TH_SUBSCRIBE_BYTES;
}

/*
 * Writes a pose into `to`, which has room for TH_POSE_BYTES, and returns that length; or 0, with nothing written, if a
 * number is not finite or a deviation negative: the daemon would refuse it.
 */
static inline size_t th_pose_write(uint8_t *to, uint64_t session, uint64_t sequence, uint64_t stamp_ns,
                                   const th_pose *pose)
{
    if (!th_finite(pose->x_m) || !th_finite(pose->y_m) || !th_finite(pose->heading_rad) ||
        !th_finite(pose->position_sd_m) || !th_finite(pose->heading_sd_rad))
        return 0;
    if (pose->position_sd_m < 0.0 || pose->heading_sd_rad < 0.0)
        return 0;
    th_begin(to, TH_KIND_POSE, 48, session, sequence, stamp_ns);
    th_store(to + 40, pose->measured_ns, 8);
    th_store_f64(to + 48, pose->x_m);
    th_store_f64(to + 56, pose->y_m);
    th_store_f64(to + 64, pose->heading_rad);
    th_store_f64(to + 72, pose->position_sd_m);
    th_store_f64(to + 80, pose->heading_sd_rad);
    return TH_POSE_BYTES;
}

/*
 * Writes the answer to a time request into `to`, which has room for TH_TIME_REPLY_BYTES. `received_ns` must have been
 * taken the moment the request arrived and `sent_ns`, also the header's stamp, just before this is sent. A sender that
 * can't do the first must not answer: its clock would seem to be ahead.
 */
static inline size_t th_time_reply_write(uint8_t *to, uint64_t session, uint64_t sequence, uint64_t request_sent_ns,
                                         uint64_t received_ns, uint64_t sent_ns)
{
    th_begin(to, TH_KIND_TIME_REPLY, 24, session, sequence, sent_ns);
    th_store(to + 40, request_sent_ns, 8);
    th_store(to + 48, received_ns, 8);
    th_store(to + 56, sent_ns, 8);
    return TH_TIME_REPLY_BYTES;
}

/* ---- the drive's duties ---- */

/* How many sessions a drive remembers having left. */
enum { TH_LEFT_SESSIONS = 16 };

typedef struct th_drive_config {
    uint32_t layout;       /* the layout this drive understands */
    double limit[TH_NUMBERS]; /* greatest magnitude of each number; 0 for those not in use */
    uint64_t valid_max_ns; /* longest validity this drive accepts */
    uint32_t lease_ms;     /* of its subscription, 100 to 60000 */
} th_drive_config;

/* What became of a datagram. */
typedef enum th_taken {
    TH_TAKEN = 0,     /* a command, in force from now on */
    TH_SUBSCRIBED,    /* the subscription was answered */
    TH_OTHER,         /* a sound datagram that is not for a drive */
    TH_MALFORMED,     /* not a datagram of this protocol, or damaged */
    TH_NOT_NEWER,     /* a duplicate, or overtaken by a newer one */
    TH_SESSION_LEFT,  /* from a session this drive has left for a newer one */
    TH_NOT_AT_REST,   /* from a new session, while the machine moves */
    TH_WRONG_LAYOUT,  /* for another kind of drive */
    TH_BEYOND_LIMIT,  /* a number, or the validity, is beyond this drive's limit */
    TH_BEGINS_MOVING, /* asks for motion at the beginning of a session, where zero has to come first */
    TH_TAKEN_COUNT    /* how many outcomes there are */
} th_taken;

typedef struct th_output {
    double number[TH_NUMBERS]; /* meaning: the layout of the configuration */
    int commanded;     /* 1: a command is in force; 0: zero by itself */
    int hold_steering; /* 1 (steered machine): leave the steering where it is, whatever its numbers say */
} th_output;

/* The fields are the drive's own; read the counters as you like, change nothing. */
typedef struct th_drive {
    th_drive_config config;
    uint64_t own_session, own_sequence, next_subscribe_ns;
    uint32_t granted_lease_ms; /* 0 until the daemon grants one */
    int has_session, live, moving;
    uint64_t session, sequence; /* of the last command taken */
    uint64_t received_ns, valid_ns;
    double number[TH_NUMBERS];
    uint64_t left[TH_LEFT_SESSIONS]; /* sessions left, a ring */
    unsigned left_count, left_next;
    uint32_t counts[TH_TAKEN_COUNT]; /* how often each outcome of a datagram came about */
} th_drive;

/* Call once at power-up, with 64 bits that differ from one power-up to the next. Zero goes out till a command comes. */
static inline void th_drive_init(th_drive *drive, const th_drive_config *config, uint64_t random, uint64_t now_ns)
{
    memset(drive, 0, sizeof *drive);
    drive->config = *config;
    drive->own_session = random;
    drive->next_subscribe_ns = now_ns;
}

/* A drive that can measure whether the machine moves says so here; else only the command decides what rest is. */
static inline void th_drive_set_moving(th_drive *drive, int moving)
{
    drive->moving = moving != 0;
}

/* Lets the command's time run out. A clock that went back gives a huge age, hence zero: the safe side. */
static inline void th_drive_expire(th_drive *drive, uint64_t now_ns)
{
    if (drive->live && now_ns - drive->received_ns >= drive->valid_ns)
        drive->live = 0;
}

/* Whether numbers of the drive's layout ask for zero: on a steered machine a matter of speed alone. */
static inline int th_drive_is_zero(const th_drive *drive, const double *number)
{
    unsigned at;
    for (at = 0; at < TH_NUMBERS; at++)
        if (number[at] != 0.0 && !th_layout_is_angle(drive->config.layout, at))
            return 0;
    return 1;
}

static inline int th_drive_has_left(const th_drive *drive, uint64_t session)
{
    unsigned at = 0;
    while (at < drive->left_count && drive->left[at] != session)
        at++;
    return at < drive->left_count;
}

/* Whether a command may come from this session with this sequence number. */
static inline th_taken th_drive_order(const th_drive *drive, const th_header *header)
{
    if (!drive->has_session)
        return TH_TAKEN;
    if (header->session == drive->session)
        return header->sequence > drive->sequence ? TH_TAKEN : TH_NOT_NEWER;
    if (th_drive_has_left(drive, header->session))
        return TH_SESSION_LEFT;
    return !drive->moving && (!drive->live || th_drive_is_zero(drive, drive->number)) ? TH_TAKEN : TH_NOT_AT_REST;
}

static inline th_taken th_drive_check(const th_drive *drive, const th_command *command)
{
    unsigned at;
    if (command->layout != drive->config.layout)
        return TH_WRONG_LAYOUT;
    if (command->valid_ns > drive->config.valid_max_ns)
        return TH_BEYOND_LIMIT;
    for (at = 0; at < TH_NUMBERS; at++)
        if (!(command->wheels[at] <= drive->config.limit[at] && command->wheels[at] >= -drive->config.limit[at]))
            return TH_BEYOND_LIMIT;
    return TH_TAKEN;
}

static inline th_taken th_drive_on_command(th_drive *drive, uint64_t now_ns, const th_header *header,
                                           const th_command *command)
{
    int begins = !drive->has_session || drive->session != header->session;
    th_taken taken;
    th_drive_expire(drive, now_ns);
    taken = th_drive_order(drive, header);
    if (taken == TH_TAKEN)
        taken = th_drive_check(drive, command);
    if (taken != TH_TAKEN)
        return taken;
    /* A drive that restarts while the daemon tracks must not join a motion at full speed. */
    if (begins && !th_drive_is_zero(drive, command->wheels))
        return TH_BEGINS_MOVING;
    if (begins && drive->has_session) {
        drive->left[drive->left_next] = drive->session;
        drive->left_next = (drive->left_next + 1) % TH_LEFT_SESSIONS;
        if (drive->left_count < TH_LEFT_SESSIONS)
            drive->left_count++;
    }
    drive->has_session = 1;
    drive->session = header->session;
    drive->sequence = header->sequence;
    drive->received_ns = now_ns;
    drive->valid_ns = command->valid_ns;
    memcpy(drive->number, command->wheels, sizeof drive->number);
    drive->live = 1;
    return TH_TAKEN;
}

static inline th_taken th_drive_sort(th_drive *drive, uint64_t now_ns, const uint8_t *bytes, size_t length)
{
    th_header header;
    th_command command;
    th_subscribed subscribed;
    if (th_header_read(bytes, length, &header) != TH_READ_OK)
        return TH_MALFORMED;
    if (header.kind == TH_KIND_COMMAND)
        return th_command_read(bytes, length, &header, &command) == TH_READ_OK
                   ? th_drive_on_command(drive, now_ns, &header, &command)
                   : TH_MALFORMED;
    if (header.kind != TH_KIND_SUBSCRIBED)
        return TH_OTHER;
    if (th_subscribed_read(bytes, length, &header, &subscribed) != TH_READ_OK)
        return TH_MALFORMED;
    drive->granted_lease_ms = (subscribed.want & TH_WANT_COMMANDS) != 0 ? subscribed.lease_ms : 0;
    return TH_SUBSCRIBED;
}

/* Hand in every datagram that arrives, with the clock read when it did. */
static inline th_taken th_drive_on_datagram(th_drive *drive, uint64_t now_ns, const uint8_t *bytes, size_t length)
{
    th_taken taken = th_drive_sort(drive, now_ns, bytes, length);
    drive->counts[taken]++;
    return taken;
}

/*
 * Writes a subscription into `to` (room for TH_SUBSCRIBE_BYTES) if one is due and returns its length, else 0. Due is it
 * every third of the lease; at most every quarter of a second while none is granted.
 */
static inline size_t th_drive_poll(th_drive *drive, uint64_t now_ns, uint8_t *to)
{
    uint64_t third_ms;
    if (now_ns < drive->next_subscribe_ns)
        return 0;
    third_ms = (drive->granted_lease_ms != 0 ? drive->granted_lease_ms : drive->config.lease_ms) / 3;
    if (drive->granted_lease_ms == 0 && third_ms > 250)
        third_ms = 250;
    if (third_ms < 10)
        third_ms = 10;
    drive->next_subscribe_ns = now_ns + third_ms * 1000000u;
    drive->own_sequence++;
    return th_subscribe_write(to, drive->own_session, drive->own_sequence, now_ns, TH_WANT_COMMANDS,
                              drive->config.lease_ms);
}

/* What the wheels have to do now. Call it every few milliseconds at least: a command's time runs out only here. */
static inline void th_drive_output(th_drive *drive, uint64_t now_ns, th_output *output)
{
    unsigned at;
    th_drive_expire(drive, now_ns);
    output->commanded = drive->live;
    output->hold_steering = th_layout_is_angle(drive->config.layout, 1) && !drive->live;
    for (at = 0; at < TH_NUMBERS; at++)
        output->number[at] = drive->live || th_layout_is_angle(drive->config.layout, at) ? drive->number[at] : 0.0;
}

#endif /* TRACKHOLD_H */
