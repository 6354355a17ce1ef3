/*
 * Checks trackhold.h against the golden datagrams and the drive's duties.
 *
 *     cc -std=c99 -Wall -Wextra -Werror -pedantic -o test_vectors test_vectors.c
 *     ./test_vectors ../../proto/vectors
 *
 * SPDX-License-Identifier: MIT
 */
#include "trackhold.h"

#include <stdio.h>
#include <stdlib.h>

static int failures;

#define CHECK(what)                                                                                                   \
    do {                                                                                                              \
        if (!(what)) {                                                                                                \
            printf("line %d: not so: %s\n", __LINE__, #what);                                                         \
            failures++;                                                                                               \
        }                                                                                                             \
    } while (0)

#define SESSION 0xFEDCBA9876543210u
#define STAMP 1234567890123456789u
#define MS 1000000u

static const char *folder;

static size_t load(const char *name, uint8_t *bytes)
{
    char path[1024];
    FILE *file;
    size_t length;
    snprintf(path, sizeof path, "%s/%s.bin", folder, name);
    file = fopen(path, "rb");
    if (file == NULL) {
        printf("%s: cannot be read\n", path);
        exit(2);
    }
    length = fread(bytes, 1, TH_MAX_DATAGRAM_BYTES, file);
    fclose(file);
    return length;
}

static void check_written(const char *name, const uint8_t *written, size_t length)
{
    uint8_t golden[TH_MAX_DATAGRAM_BYTES];
    size_t expected = load(name, golden);
    if (length != expected || memcmp(written, golden, length) != 0) {
        printf("%s: other bytes than the golden ones\n", name);
        failures++;
    }
}

/* ---- golden datagrams ---- */

static void test_written(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    th_pose pose = {18446744073709551614u, -12.34375, 0.1, -3.141592653589793, 0.015, 1e-310};
    CHECK(th_pose_write(bytes, SESSION, 1, STAMP, &pose) == TH_POSE_BYTES);
    check_written("pose", bytes, TH_POSE_BYTES);
    CHECK(th_subscribe_write(bytes, SESSION, 8, STAMP, TH_WANT_COMMANDS | TH_WANT_STATUS, 3000) == TH_SUBSCRIBE_BYTES);
    check_written("subscribe", bytes, TH_SUBSCRIBE_BYTES);
    /* The golden reply has another stamp in its header than inside. */
    CHECK(th_time_reply_write(bytes, SESSION, 10, 9223372036854775808u, 9007199254740993u, 9007199254740995u) ==
          TH_TIME_REPLY_BYTES);
    CHECK(th_load(bytes + 24, 8) == 9007199254740995u);
    th_store(bytes + 24, STAMP, 8);
    check_written("time-reply", bytes, TH_TIME_REPLY_BYTES);

    pose.heading_rad = th_load_f64((const uint8_t *)"\0\0\0\0\0\0\xf8\x7f");
    CHECK(th_pose_write(bytes, SESSION, 1, STAMP, &pose) == 0);
    pose.heading_rad = 0.0;
    pose.position_sd_m = -1.0;
    CHECK(th_pose_write(bytes, SESSION, 1, STAMP, &pose) == 0);
}

static void test_commands(void)
{
    static const struct {
        const char *name;
        uint64_t sequence;
        uint32_t layout;
        double first, second, third;
    } cases[] = {
        {"command", 3, TH_LAYOUT_LEFT_RIGHT, -7.1, -5.3, 0.0},
        {"command.body", 4, TH_LAYOUT_BODY, -0.75, 0.3, 0.0},
        {"command.speed-steer", 5, TH_LAYOUT_SPEED_STEER, 1.25, -0.45, 0.0},
        {"command.ackermann", 12, TH_LAYOUT_ACKERMANN, 1.25, 0.43, 0.34},
        {"command.steered-wheel", 13, TH_LAYOUT_STEERED_WHEEL, -0.85, 1.5, 0.0},
    };
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    unsigned at;
    for (at = 0; at < sizeof cases / sizeof cases[0]; at++) {
        th_header header = {0};
        th_command command = {0};
        size_t length = load(cases[at].name, bytes);
        CHECK(th_command_read(bytes, length, &header, &command) == TH_READ_OK);
        CHECK(header.session == SESSION && header.sequence == cases[at].sequence && header.stamp_ns == STAMP);
        CHECK(command.mode == TH_MODE_TRACKING && command.layout == cases[at].layout);
        CHECK(command.valid_ns == 100 * MS);
        CHECK(command.speed_m_s == -0.625 && command.turn_rate_rad_s == 0.2);
        CHECK(command.wheels[0] == cases[at].first && command.wheels[1] == cases[at].second);
        CHECK(command.wheels[2] == cases[at].third && command.wheels[3] == 0.0);
    }
}

static void test_others(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    th_header header = {0};
    th_subscribed subscribed = {{0}, 0, 0, 0, 0};
    uint64_t sent_ns = 0;
    size_t length = load("subscribed", bytes);
    CHECK(th_subscribed_read(bytes, length, &header, &subscribed) == TH_READ_OK);
    CHECK(subscribed.boot[0] == 0x80 && subscribed.boot[15] == 0x8F);
    CHECK(subscribed.want == 5 && subscribed.lease_ms == 3000);
    CHECK(subscribed.oldest_entry == 9007199254740993u && subscribed.next_entry == 18446744073709551614u);
    CHECK(th_time_request_read(bytes, length, &header, &sent_ns) == TH_READ_KIND);
    length = load("time-request", bytes);
    CHECK(th_time_request_read(bytes, length, &header, &sent_ns) == TH_READ_OK);
    CHECK(header.sequence == 11 && sent_ns == 9223372036854775809u);
}

static void test_refusals(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES + 1] = {0};
    uint8_t good[TH_MAX_DATAGRAM_BYTES];
    th_header header = {0};
    th_command command = {0};
    size_t length = load("command", good), cut;
    unsigned at;
    static const struct {
        unsigned at;
        uint8_t value;
        th_read read;
    } cases[] = {
        {0, '{', TH_READ_MAGIC},     {4, 2, TH_READ_VERSION}, {5, TH_KIND_POSE, TH_READ_KIND}, {6, 63, TH_READ_LENGTH},
        {36, 1, TH_READ_RESERVED},   {40, 5, TH_READ_VALUE},  {43, 1, TH_READ_VALUE},          {44, 5, TH_READ_VALUE},
        {103, 0x7F, TH_READ_OK},
    };
    for (at = 0; at < sizeof cases / sizeof cases[0]; at++) {
        memcpy(bytes, good, length);
        bytes[cases[at].at] = cases[at].value;
        CHECK(th_command_read(bytes, length, &header, &command) == cases[at].read);
    }
    for (at = 56; at < 104; at += 8) { /* every double of the payload */
        memcpy(bytes, good, length);
        th_store(bytes + at, 0x7FF0000000000000u, 8);
        CHECK(th_command_read(bytes, length, &header, &command) == TH_READ_NOT_FINITE);
        th_store(bytes + at, 0xFFF8000000000001u, 8);
        CHECK(th_command_read(bytes, length, &header, &command) == TH_READ_NOT_FINITE);
    }
    for (cut = 0; cut < length; cut++)
        CHECK(th_command_read(good, cut, &header, &command) == TH_READ_LENGTH);
    memcpy(bytes, good, length);
    CHECK(th_command_read(bytes, length + TH_TAG_BYTES, &header, &command) == TH_READ_OK);
    CHECK(th_command_read(bytes, length + 1, &header, &command) == TH_READ_LENGTH);
    CHECK(th_command_read(bytes, sizeof bytes, &header, &command) == TH_READ_LENGTH);
}

/* ---- the drive's duties ---- */

static th_drive drive;
static th_output output;

static void power_up(uint32_t layout)
{
    th_drive_config config = {0, {10.0, 10.0, 0.0}, 500 * MS, 3000};
    config.layout = layout;
    th_drive_init(&drive, &config, 77, 0);
}

/* Hands in a command at `now_ms`, valid for 100 ms, for the layout of the drive. */
static th_taken command_at(uint64_t now_ms, uint64_t session, uint64_t sequence, double first, double second)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    size_t length = load("command", bytes);
    th_store(bytes + 8, session, 8);
    th_store(bytes + 16, sequence, 8);
    th_store(bytes + 44, drive.config.layout, 4);
    th_store_f64(bytes + 72, first);
    th_store_f64(bytes + 80, second);
    return th_drive_on_datagram(&drive, now_ms * MS, bytes, length);
}

/* A drive that has begun session 1 with the zero that has to come first. */
static void begin(uint32_t layout)
{
    power_up(layout);
    CHECK(command_at(0, 1, 0, 0, 0) == TH_TAKEN);
}

/* Whether the drive puts out these numbers, by command (1) or by itself (0). */
static int puts_out(uint64_t now_ms, int commanded, double first, double second)
{
    th_drive_output(&drive, now_ms * MS, &output);
    return output.commanded == commanded && output.number[0] == first && output.number[1] == second;
}

static void test_time_runs_out(void)
{
    power_up(TH_LAYOUT_LEFT_RIGHT);
    CHECK(puts_out(0, 0, 0, 0)); /* zero at power-up */
    CHECK(puts_out(100000, 0, 0, 0));
    begin(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(1000, 1, 5, 2, 3) == TH_TAKEN);
    CHECK(puts_out(1000, 1, 2, 3));
    CHECK(puts_out(1099, 1, 2, 3));
    CHECK(puts_out(1100, 0, 0, 0)); /* 100 ms after its reception */
    CHECK(puts_out(1099, 0, 0, 0)); /* for good, even if the clock goes back */
    CHECK(command_at(1200, 1, 6, 4, 4) == TH_TAKEN); /* the next newer one counts again */
    CHECK(puts_out(1201, 1, 4, 4));
    CHECK(puts_out(1199, 0, 0, 0)); /* a clock that went back */
    CHECK(!output.hold_steering);
}

static void test_only_newer(void)
{
    begin(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(0, 1, 5, 1, 1) == TH_TAKEN);
    CHECK(command_at(50, 1, 5, 1, 1) == TH_NOT_NEWER);
    CHECK(command_at(60, 1, 4, 9, 9) == TH_NOT_NEWER);
    CHECK(puts_out(99, 1, 1, 1));
    CHECK(puts_out(100, 0, 0, 0)); /* what is not newer extends nothing */
    CHECK(command_at(110, 1, 5, 1, 1) == TH_NOT_NEWER);
    CHECK(puts_out(110, 0, 0, 0));
    /* Of a burst only the last counts, in whatever order it comes. */
    CHECK(command_at(200, 1, 6, 1, 1) == TH_TAKEN);
    CHECK(command_at(200, 1, 9, 4, 4) == TH_TAKEN);
    CHECK(command_at(200, 1, 7, 2, 2) == TH_NOT_NEWER);
    CHECK(puts_out(200, 1, 4, 4));
    CHECK(command_at(201, 1, UINT64_MAX, 5, 5) == TH_TAKEN);
    CHECK(puts_out(202, 1, 5, 5));
    CHECK(drive.counts[TH_TAKEN] == 5 && drive.counts[TH_NOT_NEWER] == 4);
}

static void test_sessions(void)
{
    uint64_t session;
    begin(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(0, 1, 50, 1, 1) == TH_TAKEN);
    CHECK(command_at(10, 2, 1, 2, 2) == TH_NOT_AT_REST);
    CHECK(puts_out(99, 1, 1, 1));
    CHECK(command_at(100, 2, 2, 0, 0) == TH_TAKEN); /* the old one's time has run out */
    CHECK(command_at(100, 2, 3, 2, 2) == TH_TAKEN);
    CHECK(command_at(101, 1, 51, 1, 1) == TH_SESSION_LEFT);
    CHECK(puts_out(102, 1, 2, 2));
    CHECK(command_at(103, 2, 4, 0, 0) == TH_TAKEN); /* rest by command */
    CHECK(command_at(104, 1, 52, 1, 1) == TH_SESSION_LEFT);
    th_drive_set_moving(&drive, 1); /* the wheels still turn */
    CHECK(command_at(105, 3, 1, 0, 0) == TH_NOT_AT_REST);
    th_drive_set_moving(&drive, 0);
    CHECK(command_at(106, 3, 2, 0, 0) == TH_TAKEN);
    for (session = 4; session < 4 + TH_LEFT_SESSIONS; session++)
        CHECK(command_at(1000 * session, session, 1, 0, 0) == TH_TAKEN);
    for (session = 3; session < 3 + TH_LEFT_SESSIONS; session++)
        CHECK(command_at(100000, session, 9, 1, 1) == TH_SESSION_LEFT);
    CHECK(puts_out(100000, 0, 0, 0));
}

/* A drive that restarts while the daemon tracks stays at zero until a zero comes. */
static void test_begins_at_rest(void)
{
    power_up(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(0, 1, 5, 3, 3) == TH_BEGINS_MOVING);
    CHECK(command_at(20, 1, 6, 0, 1e-9) == TH_BEGINS_MOVING); /* one wheel is enough */
    CHECK(command_at(40, 1, 7, 1e-9, 0) == TH_BEGINS_MOVING);
    CHECK(puts_out(50, 0, 0, 0));
    CHECK(command_at(60, 1, 8, 11, 0) == TH_BEYOND_LIMIT); /* other reasons come first */
    CHECK(command_at(80, 1, 9, 0, -0.0) == TH_TAKEN);
    CHECK(command_at(100, 1, 10, 3, 3) == TH_TAKEN);
    CHECK(puts_out(120, 1, 3, 3));
    CHECK(command_at(300, 1, 11, 3, 3) == TH_TAKEN); /* its time ran out, but the session goes on */
    CHECK(command_at(500, 2, 1, 3, 3) == TH_BEGINS_MOVING);
    CHECK(command_at(510, 1, 12, 4, 4) == TH_TAKEN); /* a refused one has not ended the session before */
    CHECK(command_at(700, 2, 1, 0, 0) == TH_TAKEN);
    CHECK(command_at(710, 2, 2, 3, 3) == TH_TAKEN);
    CHECK(drive.counts[TH_BEGINS_MOVING] == 4);

    power_up(TH_LAYOUT_BODY);
    CHECK(command_at(0, 1, 1, 0, 0.1) == TH_BEGINS_MOVING); /* a turn on the spot is motion */
    power_up(TH_LAYOUT_SPEED_STEER);
    CHECK(command_at(0, 1, 1, 0.1, 0) == TH_BEGINS_MOVING);
    CHECK(puts_out(1, 0, 0, 0) && output.hold_steering);
    CHECK(command_at(10, 1, 2, 0, 0.5) == TH_TAKEN); /* a steering angle is not */
    CHECK(puts_out(20, 1, 0, 0.5));
}

static void test_checks(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    size_t length = load("command.body", bytes);
    begin(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(0, 1, 5, -10, 10) == TH_TAKEN); /* at the limit */
    CHECK(command_at(10, 1, 6, 10.000001, 0) == TH_BEYOND_LIMIT);
    CHECK(command_at(20, 1, 7, 0, -10.000001) == TH_BEYOND_LIMIT);
    th_store(bytes + 8, 1, 8);
    th_store(bytes + 16, 8, 8);
    CHECK(th_drive_on_datagram(&drive, 30 * MS, bytes, length) == TH_WRONG_LAYOUT);
    length = load("command", bytes);
    th_store(bytes + 8, 1, 8);
    th_store(bytes + 16, 8, 8);
    th_store(bytes + 48, 500 * MS + 1, 8);
    CHECK(th_drive_on_datagram(&drive, 40 * MS, bytes, length) == TH_BEYOND_LIMIT);
    th_store(bytes + 48, 100 * MS, 8);
    th_store(bytes + 72, 0x7FF8000000000000u, 8);
    CHECK(th_drive_on_datagram(&drive, 50 * MS, bytes, length) == TH_MALFORMED);
    CHECK(th_drive_on_datagram(&drive, 60 * MS, bytes, 0) == TH_MALFORMED);
    CHECK(puts_out(99, 1, -10, 10)); /* the last one taken runs on */
    CHECK(puts_out(100, 0, 0, 0));   /* until its time is up */
    CHECK(command_at(110, 1, 6, 1, 1) == TH_TAKEN);
    length = load("status", bytes);
    CHECK(th_drive_on_datagram(&drive, 111 * MS, bytes, length) == TH_OTHER);
}

static void test_steered(void)
{
    power_up(TH_LAYOUT_SPEED_STEER);
    CHECK(puts_out(0, 0, 0, 0) && output.hold_steering);
    begin(TH_LAYOUT_SPEED_STEER);
    CHECK(command_at(0, 1, 1, 2, 0.5) == TH_TAKEN);
    CHECK(puts_out(50, 1, 2, 0.5) && !output.hold_steering);
    CHECK(puts_out(100, 0, 0, 0.5) && output.hold_steering); /* speed zero, steering held */
    CHECK(command_at(110, 1, 2, 0, -0.5) == TH_TAKEN);
    CHECK(command_at(120, 2, 1, 0, -0.4) == TH_TAKEN); /* rest is a matter of speed alone */
    CHECK(puts_out(121, 1, 0, -0.4));
    begin(TH_LAYOUT_STEERED_WHEEL);
    CHECK(command_at(0, 1, 1, 2, 1.5) == TH_TAKEN);
    CHECK(puts_out(100, 0, 0, 1.5) && output.hold_steering);
}

/* A car with an angle for each front wheel: three numbers, two of them held. */
static void test_three_numbers(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES];
    size_t length = load("command.ackermann", bytes);
    begin(TH_LAYOUT_ACKERMANN);
    th_store(bytes + 8, 1, 8);
    CHECK(th_drive_on_datagram(&drive, 0, bytes, length) == TH_BEYOND_LIMIT); /* the third number's limit is 0 */
    drive.config.limit[2] = 0.5;
    CHECK(th_drive_on_datagram(&drive, 0, bytes, length) == TH_TAKEN);
    CHECK(puts_out(50, 1, 1.25, 0.43) && output.number[2] == 0.34);
    CHECK(puts_out(100, 0, 0, 0.43) && output.number[2] == 0.34 && output.hold_steering);
    th_store_f64(bytes + 72, 0.0);
    th_store(bytes + 8, 2, 8);
    CHECK(th_drive_on_datagram(&drive, 110 * MS, bytes, length) == TH_TAKEN); /* angles are no motion */
}

static void test_subscription(void)
{
    uint8_t bytes[TH_MAX_DATAGRAM_BYTES], answer[TH_MAX_DATAGRAM_BYTES];
    size_t length = load("subscribed", answer);
    power_up(TH_LAYOUT_LEFT_RIGHT);
    CHECK(th_drive_poll(&drive, 0, bytes) == TH_SUBSCRIBE_BYTES);
    CHECK(th_load(bytes + 8, 8) == 77 && th_load(bytes + 16, 8) == 1);
    CHECK(th_load(bytes + 40, 4) == TH_WANT_COMMANDS && th_load(bytes + 44, 4) == 3000);
    CHECK(th_drive_poll(&drive, 249 * MS, bytes) == 0);
    CHECK(th_drive_poll(&drive, 250 * MS, bytes) == TH_SUBSCRIBE_BYTES); /* no answer: again soon */
    CHECK(th_drive_on_datagram(&drive, 260 * MS, answer, length) == TH_SUBSCRIBED);
    CHECK(th_drive_poll(&drive, 500 * MS, bytes) == TH_SUBSCRIBE_BYTES);
    CHECK(th_drive_poll(&drive, 1499 * MS, bytes) == 0);
    CHECK(th_drive_poll(&drive, 1500 * MS, bytes) == TH_SUBSCRIBE_BYTES); /* every third of the lease */
    CHECK(th_load(bytes + 16, 8) == 4);
    th_store(answer + 56, 0, 4); /* no room */
    CHECK(th_drive_on_datagram(&drive, 1501 * MS, answer, length) == TH_SUBSCRIBED);
    CHECK(th_drive_poll(&drive, 2500 * MS, bytes) == TH_SUBSCRIBE_BYTES);
    CHECK(th_drive_poll(&drive, 2750 * MS, bytes) == TH_SUBSCRIBE_BYTES);
}

/* Any bytes leave a drive within its limits; built with sanitizers this finds reads beyond the end. */
static void test_noise(void)
{
    static const char *const names[] = {"command", "command.body", "subscribed", "time-request", "status", "ack"};
    uint32_t state = 1;
    unsigned round, change, moved = 0;
    power_up(TH_LAYOUT_LEFT_RIGHT);
    CHECK(command_at(0, SESSION, 0, 0, 0) == TH_TAKEN); /* so that what the golden datagrams ask for is taken */
    for (round = 0; round < 20000; round++) {
        uint8_t bytes[TH_MAX_DATAGRAM_BYTES], *exact;
        size_t length = load(names[round % 6], bytes);
        for (change = 0; change < round % 5; change++) {
            state = state * 1664525u + 1013904223u;
            bytes[(state >> 8) % length] = (uint8_t)(state >> 24);
        }
        state = state * 1664525u + 1013904223u;
        if (round % 3 == 0)
            length = (state >> 8) % (length + 1);
        exact = malloc(length + 1); /* one more, for malloc(0) may give nothing */
        if (exact == NULL)
            exit(2);
        memcpy(exact + 1, bytes, length);
        th_drive_on_datagram(&drive, (uint64_t)round * MS, exact + 1, length);
        free(exact);
        th_drive_output(&drive, (uint64_t)round * MS, &output);
        CHECK(output.number[0] >= -10 && output.number[0] <= 10 && output.number[1] >= -10 && output.number[1] <= 10);
        moved += output.number[0] != 0;
    }
    CHECK(moved > 0);
}

int main(int argc, char **argv)
{
    if (argc != 2) {
        printf("usage: %s FOLDER, the one with the golden datagrams\n", argv[0]);
        return 2;
    }
    folder = argv[1];
    test_written();
    test_commands();
    test_others();
    test_refusals();
    test_time_runs_out();
    test_only_newer();
    test_sessions();
    test_begins_at_rest();
    test_checks();
    test_steered();
    test_three_numbers();
    test_subscription();
    test_noise();
    if (failures == 0)
        printf("all checks passed\n");
    return failures == 0 ? 0 : 1;
}
