/* The step in C: the work of step_kernel (src/steerkit/step.py) and of the kernels that it calls, in the same order of operations.
 *
 * The yardstick for benchmarks/step.py, which compiles this file, proves that it gives the numbers of the Python kernels, and times
 * both. One function here for each kernel there, under its name without "_kernel". SI units. No part of the package.
 *
 * Places and constants are those of the Python modules: same_work.py writes them to numbers.h, a constant NAME of module.py as
 * MODULE_NAME, those of memory_row.py and the causes by their bare names. Compile without reassociation and without contraction
 * (-ffp-contract=off): then the bits agree as well.
 */

#include <math.h>
#include <stdbool.h>
#include <string.h>

#include "numbers.h"

/* Branches that the proof wants entered: counted where COUNTING is defined, nothing where the step is timed. */
#define BRANCHES(ONE) \
    ONE(SCHEDULE_WITHIN_AIM) ONE(SCHEDULE_STRAIGHT) ONE(SCHEDULE_OTHER_WAY) ONE(SCHEDULE_GATED) ONE(SCHEDULE_CAPPED) \
    ONE(SCHEDULE_ON_THE_SPOT) ONE(CIRCLING) ONE(CIRCLING_NEARER) ONE(SLOW_ON_THE_SPOT) ONE(SLOW_DRIVES) \
    ONE(TURN_TIME_OVERRUNS) ONE(TURN_TIME_AWAY) ONE(TURN_TIME_TOWARD) ONE(ENTERING_PASSING) ONE(PASSING_STOPS) \
    ONE(PASSING_STRAIGHT) ONE(PASSING_CAPPED) ONE(CUT_STOP_WHOLE) ONE(CUT_STOP_NONE) ONE(CUT_STOP_CUT) ONE(STOPS_AT_REST) \
    ONE(STOPS_SPINNING) ONE(STOPS_MISSING) ONE(STOPS_WITHIN) ONE(GRID_NONE) ONE(GRID_SWAPPED) ONE(GRID_BOTH_IN_BAND) \
    ONE(GRID_ONE_IN_BAND) ONE(GRID_OUT_OF_BAND) ONE(GRID_ON_THE_SPOT) ONE(GRID_STOPPING) ONE(GRID_NOTHING_FITS) \
    ONE(GRID_RAMP_CLIPPED) ONE(CHOICE_IN_BAND) ONE(CHOICE_TOO_FAR) ONE(CHOICE_NO_STEPS) ONE(CHOICE_FLOOR) ONE(CHOICE_CEIL) \
    ONE(CHOICE_TOO_SLOW) ONE(CHOSEN_0_0) ONE(CHOSEN_0_1) ONE(CHOSEN_0_2) ONE(CHOSEN_0_3) ONE(CHOSEN_0_4) ONE(CHOSEN_1_0) \
    ONE(CHOSEN_1_1) ONE(CHOSEN_1_2) ONE(CHOSEN_1_3) ONE(CHOSEN_1_4) ONE(CHOSEN_2_0) ONE(CHOSEN_2_1) ONE(CHOSEN_2_2) \
    ONE(CHOSEN_2_3) ONE(CHOSEN_2_4) ONE(WATCH_BLIND) ONE(WATCH_BEGINS) ONE(WATCH_TOLD) ONE(WATCH_NOT_TOLD) ONE(WATCH_ANSWERED) \
    ONE(WATCH_SILENT) ONE(WATCH_RAISED) ONE(WATCH_NOT_RAISED) ONE(WATCH_WAITS) ONE(TURN_FIRST_FREE) ONE(TURN_FIRST_TURN) \
    ONE(TURN_FIRST_WHEELS) ONE(TURN_FIRST_ROOM) ONE(NEXT_GOAL_NONE) ONE(NEXT_GOAL_BAD) ONE(NEXT_GOAL_ROBOT) \
    ONE(NEXT_GOAL_WORLD) ONE(PASSED_BEFORE) ONE(PASSED_BY_COMMITTED) ONE(PASSED_BY_TOUCH) ONE(TOUCH_MISSED) ONE(SETTLING_IN) \
    ONE(STAYING) ONE(TOO_SLOW_A_STEP) ONE(SCHEDULE_LAW) ONE(CONSTANT_LAW) ONE(CONSTANT_WAY_POINT) \
    ONE(SCHEDULE_FROM_BAND) ONE(CHOICE_NO_STEP_TOO_SLOW) ONE(WATCH_REPEATED) ONE(WATCH_LITTLE_DUE) ONE(PATIENCE_TIME) \
    ONE(PATIENCE_PERIODS) ONE(SLOWEST_RAISED) ONE(SLOWEST_CAPPED_BY_SETTING) ONE(SLOWEST_CAPPED_BY_STEP) \
    ONE(SIGHTED_SAME) ONE(SIGHTED_OTHER) ONE(PASSED_NEXT_BAD) ONE(PASSED_GOAL_BAD) ONE(PASSED_AT_REST) \
    ONE(SILENT_CLEARED_HELD) ONE(SILENT_CLEARED_ARRIVED) ONE(TOUCH_BEHIND_LAG)
#ifdef COUNTING
#define NAMED(name) BRANCH_##name,
#define WRITTEN(name) #name " "
enum { BRANCHES(NAMED) COUNTED };
const char names[] = BRANCHES(WRITTEN);
long entered[COUNTED];
#define ENTER(name) ((void)entered[BRANCH_##name]++)
#define CHOSEN(i, j) ((void)entered[BRANCH_CHOSEN_0_0 + 5 * (i) + (j)]++)
#else
#define ENTER(name) ((void)0)
#define CHOSEN(i, j) ((void)(i), (void)(j))
#endif

typedef struct { double x, y, heading; } Pose;
typedef struct { double v, w; } Motion;
typedef struct { Pose pose; Motion motion; } Moving;
typedef struct { double v, w; int bound; } Limited;
typedef struct { double bearing, distance, speed, progress; } Approach;
typedef struct { double x, y; } Point;
typedef struct { double begin, until; } Span;
typedef struct { double v, w, why; bool stopping; } Wanted;
typedef struct { double turned, nearest; bool circles; } Circling;
typedef struct { double v, w, why, progress, integral, error, asked, heading; } Constant;
typedef struct { Motion command, ramp; } Gridded;
typedef struct { double since; bool good; } Clock;
typedef struct { Motion motion; double limit; int trouble; } Seen;
typedef struct { Motion last, ramp; int trouble; } Before;
typedef struct { Pose pose; double age; bool local; int trouble; } Posed;
typedef struct { Point point; bool aimed, fresh; double moved; } Goal;
typedef struct { Point point; int trouble; } Next;

/* Commands under way, and the newest of them, which stands for the first row. */
typedef struct { const double *row; long rows; double since; Motion last; double dead_time, lag; } Commands;

/* min and max of Python: the first one where they are equal or not comparable. */
static double least(double a, double b) { return b < a ? b : a; }
static double most(double a, double b) { return b > a ? b : a; }

/* A floor or ceiling as Python has it: an integer, without a -0. */
static double whole(double value) { return (double)(long long)value; }

/* angles */

static double wrap(double angle)
{
    if (-ANGLES_PI < angle && angle <= ANGLES_PI)
        return angle;
    if (!(-INFINITY < angle && angle < INFINITY))
        return NAN;
    double wrapped = atan2(sin(angle), cos(angle));
    return wrapped > -ANGLES_PI ? wrapped : ANGLES_PI;
}

static double difference(double target, double origin) { return wrap(target - origin); }

/* kinematics */

static double sinc(double angle) { return angle != 0.0 ? sin(angle) / angle : 1.0; }

static Pose arc(Pose p, double speed, double turn_rate, double duration)
{
    double half = 0.5 * turn_rate * duration;
    double chord = speed * duration * sinc(half);
    return (Pose){p.x + chord * cos(p.heading + half), p.y + chord * sin(p.heading + half), wrap(p.heading + 2.0 * half)};
}

static Point to_world(Pose p, double ahead, double left)
{
    double c = cos(p.heading);
    double s = sin(p.heading);
    return (Point){p.x + c * ahead - s * left, p.y + s * ahead + c * left};
}

/* limits */

static double clip(double value, double low, double high) { return value < low ? low : (value > high ? high : value); }

static Point reach(double speed, double faster, double slower)
{
    double v = fabs(speed);
    double back = v >= slower ? v - slower : -faster * (1.0 - v / slower);
    return speed >= 0.0 ? (Point){back, v + faster} : (Point){-v - faster, -back};
}

static Limited limit(
    Motion before, double v, double w, double top, double reverse, double turn, double wheel, double half_track,
    double faster, double slower, double turning)
{
    int bound = 0;
    double share = 1.0;
    if (v > top || v < -reverse) {
        bound |= v > top + LIMITS_ROUNDING || v < -reverse - LIMITS_ROUNDING ? SPEED_LIMIT : 0;
        if (v > 0.0 || reverse > 0.0)
            share = (v > 0.0 ? top : reverse) / fabs(v);
        else
            v = 0.0;
    }
    if (fabs(w) * share > turn) {
        share = turn / fabs(w);
        bound |= TURN_RATE_LIMIT;
    }
    double side = fabs(v) + fabs(w) * half_track;
    if (side * share > wheel * (1.0 + LIMITS_ROUNDING)) {
        share = wheel / side;
        bound |= WHEEL_SPEED_LIMIT;
    }

    Point range = reach(before.v, faster, slower);
    double low = range.x, high = range.y;
    double v1 = clip(share * v, low, high);
    if (fabs(v1 - share * v) > LIMITS_ROUNDING)
        bound |= (v1 - share * v) * before.v > 0.0 ? BRAKING_LIMIT : ACCELERATION_LIMIT;
    if (v * v1 > 0.0 && fabs(v1) > fabs(share * v))
        share = most(share, least(1.0, v1 / v));

    double aim = clip(share * w, -turn, turn);
    if (v == 0.0 && w == 0.0 && before.v != 0.0)
        aim = clip(before.w * most(0.0, v1 / before.v), -turn, turn);
    double w1 = clip(aim, before.w - turning, before.w + turning);
    if (fabs(w1 - aim) > LIMITS_ROUNDING)
        bound |= TURN_ACCELERATION_LIMIT;

    side = fabs(v1) + fabs(w1) * half_track;
    if (side > wheel * (1.0 + LIMITS_ROUNDING)) {
        bound |= WHEEL_SPEED_LIMIT;
        double least_v = most(most(0.0, low), -high);
        double least_w = most(0.0, fabs(before.w) - turning);
        double size_v = least(fabs(v1), most(fabs(v1) * wheel / side, least_v));
        double size_w = least(fabs(w1), most((wheel - size_v) / half_track, least_w));
        size_v = least(size_v, most(wheel - size_w * half_track, least_v));
        v1 = copysign(size_v, v1);
        w1 = copysign(size_w, w1);
    }
    return (Limited){v1, w1, bound};
}

static Limited turn_first(
    Motion before, double v, double w, double top, double turn, double wheel, double half_track, double faster, double slower,
    double turning)
{
    int bound = 0;
    Point range = reach(before.v, faster, slower);
    double low = range.x, high = range.y;
    double least_v = most(most(0.0, low), -high);
    double least_w = most(0.0, fabs(before.w) - turning);
    double w1 = clip(w, before.w - turning, before.w + turning);
    if (fabs(w1 - w) > LIMITS_ROUNDING)
        bound |= TURN_ACCELERATION_LIMIT;
    double fastest = most(least_w, least(turn, (wheel - least_v) / half_track));
    ENTER(TURN_FIRST_FREE);
    if (fabs(w1) > fastest) {
        if (fastest == turn)
            ENTER(TURN_FIRST_TURN);
        else
            ENTER(TURN_FIRST_WHEELS);
        bound |= fastest == turn ? TURN_RATE_LIMIT : WHEEL_SPEED_LIMIT;
        w1 = clip(w1, -fastest, fastest);
    }
    double aim = clip(v, 0.0, top);
    double v1 = clip(aim, low, high);
    if (fabs(v1 - v) > LIMITS_ROUNDING)
        bound |= v1 > aim ? BRAKING_LIMIT : (v1 < aim ? ACCELERATION_LIMIT : SPEED_LIMIT);
    double room = most(least_v, wheel - fabs(w1) * half_track);
    if (fabs(v1) > room) {
        ENTER(TURN_FIRST_ROOM);
        bound |= fabs(v1) > room * (1.0 + LIMITS_ROUNDING) ? WHEEL_SPEED_LIMIT : 0;
        v1 = clip(v1, -room, room);
    }
    return (Limited){v1, w1, bound};
}

static double held_stop(double speed, double braking, double period)
{
    double step = braking * period;
    double n = whole(floor(speed / step));
    return period * (speed * (n + 1.0) - step * n * (n + 1.0) / 2.0);
}

static double held_speed(double distance, double braking, double period, double top)
{
    if (!(distance > 0.0))
        return 0.0;
    double step = braking * period;
    double u = distance / (step * period);
    if (u > 1e15)
        return top;
    double n = whole(floor((sqrt(1.0 + 8.0 * u) - 1.0) / 2.0));
    return least(top, (n + (u - n * (n + 1.0) / 2.0) / (n + 1.0)) * step);
}

/* heading */

static double heading_rate(double heading, double before, double duration)
{
    double turned = difference(heading, before);
    return turned == turned && duration > HEADING_SHORTEST ? turned / duration : 0.0;
}

static double integrate(double integral, double error, double asked, double given, double duration)
{
    if ((asked - given) * error > 0.0)
        return integral;
    return integral + error * duration;
}

/* prediction */


static double respond(double value, double command, double duration, double lag)
{
    if (!(lag > 0.0))
        return command;
    return command + (value - command) * exp(-duration / lag);
}

static Pose lagged_arc(Pose p, Motion motion, Motion command, double duration, double lag)
{
    const double shares[4] = {PREDICTION_G1, PREDICTION_G2, 1.0 - PREDICTION_G2, 1.0 - PREDICTION_G1};
    const double weights[4] = {PREDICTION_H1, PREDICTION_H2, PREDICTION_H2, PREDICTION_H1};
    double dv = motion.v - command.v;
    double dw = motion.w - command.w;
    double moved_x = 0.0, moved_y = 0.0;
    for (int i = 0; i < 4; i++) {
        double t = shares[i] * duration;
        double left = exp(-t / lag);
        double angle = p.heading + command.w * t + dw * lag * (1.0 - left);
        double path = weights[i] * duration * (command.v + dv * left);
        moved_x += path * cos(angle);
        moved_y += path * sin(angle);
    }
    double heading = p.heading + command.w * duration + dw * lag * (1.0 - exp(-duration / lag));
    return (Pose){p.x + moved_x, p.y + moved_y, heading};
}

static Moving hold(Pose p, Motion motion, Motion command, double duration, double lag)
{
    if (!(lag > 0.0) || (motion.v == command.v && motion.w == command.w))
        return (Moving){arc(p, command.v, command.w, duration), command};
    double first = least(duration, PREDICTION_TRANSIENT * lag);
    p = lagged_arc(p, motion, command, first, lag);
    if (duration > first) {
        Motion then = {respond(motion.v, command.v, first, lag), respond(motion.w, command.w, first, lag)};
        p = lagged_arc(p, then, command, duration - first, lag);
    }
    return (Moving){p, {respond(motion.v, command.v, duration, lag), respond(motion.w, command.w, duration, lag)}};
}

static Span acting(const Commands *c, double start, double end, long i)
{
    double begin = i == c->rows - 1 ? start : most(start, c->dead_time - (c->row[3 * i] + c->since));
    double until = i == 0 ? end : least(end, c->dead_time - (c->row[3 * i - 3] + c->since));
    return (Span){begin, until};
}

static Moving carry(const Commands *c, double start, double end, Pose p, Motion motion)
{
    for (long i = c->rows - 1; i >= 0; i--) {
        Span span = acting(c, start, end, i);
        if (span.until > span.begin) {
            Motion command = i > 0 ? (Motion){c->row[3 * i + 1], c->row[3 * i + 2]} : c->last;
            Moving moved = hold(p, motion, command, span.until - span.begin, c->lag);
            p = moved.pose;
            motion = moved.motion;
        }
    }
    return (Moving){p, motion};
}

static Motion motion_then(const Commands *c, double start, double end, double v, double w)
{
    for (long i = c->rows - 1; i >= 0; i--) {
        Span span = acting(c, start, end, i);
        if (span.until > span.begin) {
            v = respond(v, i > 0 ? c->row[3 * i + 1] : c->last.v, span.until - span.begin, c->lag);
            w = respond(w, i > 0 ? c->row[3 * i + 2] : c->last.w, span.until - span.begin, c->lag);
        }
    }
    return (Motion){v, w};
}

static Pose stop_end(Pose p, double v, double w, double braking, double turn_acceleration, double path)
{
    if (v <= 0.0)
        return p;
    if (braking * fabs(w) <= turn_acceleration * v)
        return arc(p, path, w / v * path, 1.0);
    double span = 2.0 * path / v;
    int pieces = 32;
    for (int i = 0; i < pieces; i++) {
        double left = 1.0 - (i + 0.5) / pieces;
        double turning = most(fabs(w) * left, fabs(w) - turn_acceleration * span * (1.0 - left));
        double step = path * 2.0 * left / pieces;
        p = arc(p, step, copysign(turning, w) * span / pieces, 1.0);
    }
    return p;
}

/* approach */

static double distance_to(double x, double y, double goal_x, double goal_y)
{
    double dx = goal_x - x;
    double dy = goal_y - y;
    return sqrt(dx * dx + dy * dy);
}

static double bearing_to(double x, double y, double goal_x, double goal_y) { return atan2(goal_y - y, goal_x - x); }

static double way_ahead(double distance, double error, double radius)
{
    double across = distance * sin(error);
    if (cos(error) <= 0.0 || (fabs(error) > APPROACH_AHEAD && fabs(across) > radius))
        return distance <= radius ? 0.0 : INFINITY;
    return distance * cos(error) - sqrt(most(0.0, radius * radius - across * across));
}

static bool stop_kept(
    Pose p, Motion before, double goal_x, double goal_y, double radius, double braking, double turn_acceleration, double path)
{
    if (before.v > 0.0 && fabs(before.w) * path > ANGLES_PI * before.v) {
        double curve = before.v / before.w;
        double away = distance_to(p.x - curve * sin(p.heading), p.y + curve * cos(p.heading), goal_x, goal_y);
        return away + fabs(curve) <= radius;
    }
    Pose end = stop_end(p, before.v, before.w, braking, turn_acceleration, path);
    return distance_to(end.x, end.y, goal_x, goal_y) <= radius;
}

static Approach constant_speed(
    Pose p, Motion before, double goal_x, double goal_y, double progress, double cruise, double aim_radius, double stop_radius,
    double capture_radius, double rest_radius, double braking, double turn_acceleration, double period)
{
    double distance = distance_to(p.x, p.y, goal_x, goal_y), bearing = bearing_to(p.x, p.y, goal_x, goal_y);
    if (before.v == 0.0 && distance <= rest_radius)
        return (Approach){bearing, distance, 0.0, APPROACH_STOPPING};
    double slower = most(0.0, before.v - braking * period);
    double path = held_stop(slower, braking, period);
    double way = way_ahead(distance, difference(bearing, p.heading), aim_radius);
    double speed = way == INFINITY ? cruise : held_speed(way, braking, period, cruise);
    double reached = progress != APPROACH_ON_THE_WAY || distance <= capture_radius ? APPROACH_CAPTURED : APPROACH_ON_THE_WAY;
    if (reached == APPROACH_CAPTURED) {
        double near = distance - aim_radius;
        speed = least(speed, near > APPROACH_NEAR * capture_radius ? held_speed(near, braking, period, cruise) : 0.0);
    }
    if (APPROACH_NEAR * capture_radius < way && way < INFINITY && path <= way + aim_radius)
        return (Approach){bearing, distance, speed, reached};
    double radius = progress == APPROACH_STOPPING ? capture_radius : stop_radius;
    if (stop_kept(p, before, goal_x, goal_y, radius, braking, turn_acceleration, path))
        return (Approach){bearing, distance, 0.0, APPROACH_STOPPING};
    return (Approach){bearing, distance, speed, reached};
}

/* schedule */

static double turn_time(double error, double rate, double acceleration, double fastest)
{
    if (rate > sqrt(2.0 * acceleration * error)) {
        ENTER(TURN_TIME_OVERRUNS);
        return rate / acceleration;
    }
    double before = 0.0;
    if (rate < 0.0) {
        ENTER(TURN_TIME_AWAY);
        before = -rate / acceleration;
        error += rate * rate / (2.0 * acceleration);
        rate = 0.0;
    } else
        ENTER(TURN_TIME_TOWARD);
    double peak = least(fastest, sqrt(acceleration * error + rate * rate / 2.0));
    if (peak <= 0.0)
        return before;
    double steady = error - (peak * peak - rate * rate / 2.0) / acceleration;
    return before + (2.0 * peak - rate) / acceleration + steady / peak;
}

static double peak_speed(double way, double v0, double top, double acceleration, double braking)
{
    return least(
        top, sqrt((v0 * v0 * braking + 2.0 * acceleration * braking * most(way, 0.0)) / (acceleration + braking)));
}

static double entering(double way, double passing, double braking, double period, double top)
{
    if (passing > 0.0) {
        ENTER(ENTERING_PASSING);
        way = most(0.0, way) + held_stop(passing, braking, period);
    }
    return held_speed(way, braking, period, top);
}

static Motion slow(
    double speed, double rate, double off, bool turning, double slowest, double half_track, double period, double tightest)
{
    if (slowest <= 0.0 || speed >= slowest)
        return (Motion){speed, rate};
    if (turning && (speed < 0.5 * slowest || slowest > tightest * rate) && off * half_track >= 0.5 * slowest * period) {
        ENTER(SLOW_ON_THE_SPOT);
        return (Motion){0.0, most(rate, slowest / half_track)};
    }
    ENTER(SLOW_DRIVES);
    return (Motion){slowest, rate};
}

static Wanted schedule(
    double distance, double error, double v0, double w0, double passing, double capture_radius, double target_radius, double top,
    double turn, double acceleration, double braking, double turn_acceleration, double period, double settling, double slowest,
    double half_track, bool on_the_spot)
{
    double b = SCHEDULE_SHARE * braking, al = SCHEDULE_SHARE * turn_acceleration;
    double least_v0 = most(v0, slowest);
    if (v0 < slowest)
        ENTER(SCHEDULE_FROM_BAND);
    double peak = most(least_v0, peak_speed(distance - target_radius, least_v0, top, acceleration, braking));
    double near = least(1.0, most(0.0, 2.0 - distance / capture_radius));
    double aim = target_radius * (SCHEDULE_AIM + (SCHEDULE_AIM_NEAR - SCHEDULE_AIM) * near);
    if (distance > 0.0)
        aim = least(aim, target_radius * SCHEDULE_GROWTH * peak / (turn * distance));
    if (distance <= most(aim, SCHEDULE_TINY)) {
        ENTER(SCHEDULE_WITHIN_AIM);
        return (Wanted){0.0, 0.0, SCHEDULE_BRAKING, false};
    }
    double size = fabs(error);
    double off = size - asin(aim / distance);
    if (off <= SCHEDULE_TINY) {
        ENTER(SCHEDULE_STRAIGHT);
        double across = distance * sin(size);
        double way = distance * cos(size) - sqrt(most(0.0, target_radius * target_radius - across * across));
        double speed = entering(way, passing, b, period, top);
        return (Wanted){most(speed, slowest), 0.0, speed >= top ? SCHEDULE_FREE : SCHEDULE_BRAKING, false};
    }
    double far = sqrt(distance * distance - aim * aim);
    double way = far - sqrt(target_radius * target_radius - aim * aim);
    double side = error >= 0.0 ? 1.0 : -1.0;
    if (w0 * side < 0.0) {
        double other = 2.0 * SCHEDULE_PI - 2.0 * size + off;
        if (turn_time(other, fabs(w0), al, turn) < turn_time(off, -fabs(w0), al, turn)) {
            ENTER(SCHEDULE_OTHER_WAY);
            off = other;
            side = -side;
        }
    }
    double rate = least(turn, held_speed(off, al, settling, turn) + most(0.0, v0 * sin(least(off, SCHEDULE_PI)) / far));

    double speed = entering(way, passing, b, period, top);
    double why = speed >= top ? SCHEDULE_FREE : SCHEDULE_BRAKING;
    double quick = least(turn, most(fabs(w0), sqrt(al * off)));
    double ahead = least(
        SCHEDULE_PI, SCHEDULE_PI / 2.0 + SCHEDULE_LEAD * quick * most(0.0, peak - least_v0) / (2.0 * acceleration));
    double cap = 0.0;
    if (off <= most(SCHEDULE_LEAST_GATE, ahead - atan2(peak / quick, far)) && !on_the_spot) {
        double left = turn_time(off, w0 * side, al, turn) + period;
        cap = off * far / (left * 2.0 * SCHEDULE_TURN_SHARE * sin(least(off, SCHEDULE_PI / 2.0)));
    } else if (on_the_spot)
        ENTER(SCHEDULE_ON_THE_SPOT);
    else
        ENTER(SCHEDULE_GATED);
    if (cap < speed) {
        ENTER(SCHEDULE_CAPPED);
        speed = cap;
        why = SCHEDULE_TURNING;
    }
    Motion slowed = slow(speed, rate, off, why == SCHEDULE_TURNING, slowest, half_track, period, 0.5 * target_radius);
    return (Wanted){slowed.v, side * slowed.w, why, false};
}

static Circling circling(double distance, double turned, double nearest, double rate, double since, bool other_goal)
{
    if (other_goal || !(distance >= SCHEDULE_NEARER * nearest)) {
        ENTER(CIRCLING_NEARER);
        return (Circling){0.0, distance, false};
    }
    turned += rate * since;
    if (fabs(turned) > SCHEDULE_CIRCLES)
        ENTER(CIRCLING);
    return (Circling){turned, nearest, fabs(turned) > SCHEDULE_CIRCLES};
}

static double passing_speed(
    double turned, double distance, double capture_radius, double target_radius, double top, double turn, double braking,
    double turn_acceleration, double period)
{
    double size = fabs(turned);
    double aim = least(SCHEDULE_AIM * target_radius, 0.5 * distance);
    if (distance <= target_radius || size >= SCHEDULE_PI / 2.0) {
        ENTER(PASSING_STOPS);
        return 0.0;
    }
    double b = SCHEDULE_SHARE * braking, al = SCHEDULE_SHARE * turn_acceleration;
    double r = capture_radius, cosine = cos(least(size + SCHEDULE_ENTRY, SCHEDULE_PI));
    double way = sqrt(most(0.0, distance * distance + r * r + 2.0 * distance * r * cosine));
    double speed = held_speed(way - target_radius, b, period, top);
    double off = size - asin(aim / distance);
    if (off <= SCHEDULE_TINY) {
        ENTER(PASSING_STRAIGHT);
        return speed;
    }
    ENTER(PASSING_CAPPED);
    double far = sqrt(distance * distance - aim * aim);
    double left = turn_time(off, 0.0, al, turn) + period;
    double cap = off * far / (left * 2.0 * SCHEDULE_TURN_SHARE * sin(off));
    return least(least(speed, cap), least(turn, sqrt(al * off)) * far / tan(off));
}

static double cut_stop(double speed, double braking, double period, double slowest)
{
    double all = held_stop(speed, braking, period);
    if (slowest <= 0.0 || speed <= 0.0) {
        ENTER(CUT_STOP_WHOLE);
        return all;
    }
    if (speed < slowest) {
        ENTER(CUT_STOP_NONE);
        return 0.0;
    }
    ENTER(CUT_STOP_CUT);
    double below = speed - braking * period * (whole(floor((speed - slowest) / (braking * period))) + 1.0);
    return all - held_stop(most(0.0, below), braking, period);
}

static bool stops(
    double distance, double error, double v0, double w0, double stop_radius, double rest_radius, double braking,
    double turn_acceleration, double period, double slowest)
{
    if (v0 <= 0.0) {
        ENTER(STOPS_AT_REST);
        return distance <= rest_radius;
    }
    double path = cut_stop(most(0.0, v0 - braking * period), braking, period, slowest);
    double spin = copysign(held_stop(most(0.0, fabs(w0) - turn_acceleration * period), turn_acceleration, period), w0);
    if (fabs(spin) >= 1.0) {
        ENTER(STOPS_SPINNING);
        return distance + path <= stop_radius;
    }
    const double turns[2] = {0.0, spin};
    for (int i = 0; i < 2; i++) {
        double ahead = distance * cos(error - turns[i]) - path;
        double across = distance * sin(error - turns[i]);
        if (ahead * ahead + across * across > stop_radius * stop_radius) {
            ENTER(STOPS_MISSING);
            return false;
        }
    }
    ENTER(STOPS_WITHIN);
    return true;
}

/* wheel_grid */

static double slowest_of(double smallest, double step)
{
    if (!(step > 0.0))
        return smallest;
    return step * most(1.0, whole(ceil(smallest / step - WHEEL_GRID_CLOSE)));
}

static double choice(int i, double ramp, double slowest, double step, double low, double high)
{
    if (fabs(ramp) < slowest) {
        ENTER(CHOICE_IN_BAND);
        double given = i == 0 ? -slowest : (i == 1 ? 0.0 : (i == 2 ? slowest : NAN));
        if (given == given && !(fabs(given - ramp) <= (slowest + step) * (1.0 + WHEEL_GRID_CLOSE)))
            ENTER(CHOICE_TOO_FAR);
        return fabs(given - ramp) <= (slowest + step) * (1.0 + WHEEL_GRID_CLOSE) ? given : NAN;
    }
    double aim = i >= 3 ? least(most(ramp, low), high) : ramp;
    if (!(step > 0.0)) {
        ENTER(CHOICE_NO_STEPS);
        if ((i == 0 || i == 3) && !(fabs(aim) >= slowest * (1.0 - WHEEL_GRID_CLOSE)))
            ENTER(CHOICE_NO_STEP_TOO_SLOW);
        return (i == 0 || i == 3) && fabs(aim) >= slowest * (1.0 - WHEEL_GRID_CLOSE) ? aim : NAN;
    }
    double steps = aim / step;
    if (i == 0 || i == 3)
        ENTER(CHOICE_FLOOR);
    else
        ENTER(CHOICE_CEIL);
    double near = whole(i == 0 || i == 3 ? floor(steps + WHEEL_GRID_CLOSE) : ceil(steps - WHEEL_GRID_CLOSE));
    double given = step * near;
    if (i != 2 && !(fabs(given) >= slowest * (1.0 - WHEEL_GRID_CLOSE)))
        ENTER(CHOICE_TOO_SLOW);
    return i != 2 && fabs(given) >= slowest * (1.0 - WHEEL_GRID_CLOSE) ? given : NAN;
}

static void swap(double *a, double *b)
{
    double kept = *a;
    *a = *b;
    *b = kept;
}

static Gridded on_grid(
    Motion ramps, double v, double w, double slowest, double step, double top, double turn, double wheel, double half_track)
{
    double v1 = ramps.v, w1 = ramps.w;
    if (!(slowest > 0.0)) {
        ENTER(GRID_NONE);
        return (Gridded){ramps, ramps};
    }
    double a = v1 - w1 * half_track, b = v1 + w1 * half_track;
    double want_a = v - w * half_track, want_b = v + w * half_track;
    bool swapped = fabs(b) < fabs(a);
    if (swapped) {
        ENTER(GRID_SWAPPED);
        swap(&a, &b);
        swap(&want_a, &want_b);
    }
    bool band_a = fabs(a) < slowest, band_b = fabs(b) < slowest;
    double aim_a = band_a ? want_a : a, aim_b = band_b ? want_b : b;
    double weight_a = band_a ? WHEEL_GRID_IN_BAND : 1.0, weight_b = band_b ? WHEEL_GRID_IN_BAND : 1.0;
    double path = v == 0.0 && w != 0.0 ? WHEEL_GRID_SPOT : WHEEL_GRID_PATH;
    double lowest = 2.0 * least(0.0, v1);
    double highest = 2.0 * (v > 0.0 ? most(top, v1) : most(0.0, v1)) * (1.0 + WHEEL_GRID_CLOSE);
    double apart = 2.0 * half_track * most(turn, fabs(w1)) * (1.0 + WHEEL_GRID_CLOSE);
    double fastest = most(wheel, fabs(v1) + fabs(w1) * half_track) * (1.0 + WHEEL_GRID_CLOSE);
    if (band_b)
        ENTER(GRID_BOTH_IN_BAND);
    else if (band_a)
        ENTER(GRID_ONE_IN_BAND);
    else
        ENTER(GRID_OUT_OF_BAND);
    if (v == 0.0 && w != 0.0)
        ENTER(GRID_ON_THE_SPOT);
    if (!(v > 0.0))
        ENTER(GRID_STOPPING);
    double best = INFINITY, best_a = 0.0, best_b = 0.0;
    int best_i = -1, best_j = -1;
    for (int i = 0; i < 3; i++) {
        double given_a = choice(i, a, slowest, step, -fastest, fastest);
        if (given_a == given_a && fabs(given_a) <= fastest) {
            double low = most(most(lowest - given_a, given_a - apart), -fastest);
            double high = least(least(highest - given_a, given_a + apart), fastest);
            for (int j = 0; j < 5; j++) {
                double given_b = choice(j, b, slowest, step, low, high);
                if (given_b == given_b && low - WHEEL_GRID_CLOSE * slowest <= given_b
                    && given_b <= high + WHEEL_GRID_CLOSE * slowest) {
                    double off_a = given_a - aim_a, off_b = given_b - aim_b;
                    double cost = weight_a * fabs(off_a) + weight_b * fabs(off_b) + WHEEL_GRID_TURNING * fabs(off_a - off_b)
                        + path * fabs(off_a + off_b);
                    if (cost < best) {
                        best = cost;
                        best_a = given_a;
                        best_b = given_b;
                        best_i = i;
                        best_j = j;
                    }
                }
            }
        }
    }
    if (best < INFINITY)
        CHOSEN(best_i, best_j);
    else
        ENTER(GRID_NOTHING_FITS);
    double ramp_a = a, ramp_b = b;
    if (band_b)
        ramp_b = best_b;
    if (band_a) {
        ramp_a = best_a;
        double kept = ramp_b;
        ramp_b = least(least(most(most(ramp_b, lowest - best_a), best_a - apart), highest - best_a), best_a + apart);
        if (ramp_b != kept)
            ENTER(GRID_RAMP_CLIPPED);
    }
    if (swapped) {
        swap(&best_a, &best_b);
        swap(&ramp_a, &ramp_b);
    }
    double width = 2.0 * half_track;
    return (Gridded){
        {0.5 * (best_a + best_b), (best_b - best_a) / width}, {0.5 * (ramp_a + ramp_b), (ramp_b - ramp_a) / width}};
}

/* memory_row */

static bool usable(double value, double bound) { return -bound <= value && value <= bound; }

static bool sound(const double *memory, long rows)
{
    for (long i = HEAD; i < HEAD + 3 * rows; i += 3)
        if (!(0.0 <= memory[i] && memory[i] <= FAR && usable(memory[i + 1], FAST) && usable(memory[i + 2], FAST)))
            return false;
    bool posed = (usable(memory[X], FAR) && usable(memory[Y], FAR) && usable(memory[HEADING], FAR)) || memory[POSE_AGE] > FAR;
    bool motion = usable(memory[SPEED], FAST) && usable(memory[TURN_RATE], FAST);
    bool base = usable(memory[BASE_SPEED], FAST) && usable(memory[BASE_TURN_RATE], FAST);
    bool ages = memory[POSE_AGE] >= 0.0 && 0.0 <= memory[BASE_AGE] && memory[BASE_AGE] <= FAR;
    bool ramp = usable(memory[RAMP_SPEED], FAST) && usable(memory[RAMP_TURN_RATE], FAST);
    bool watched = 0.0 <= memory[SLOWEST] && memory[SLOWEST] <= FAST && usable(memory[WATCH_PATH], FAR)
        && usable(memory[WATCH_TURN], FAR) && 0.0 <= memory[WATCH_TIME] && memory[WATCH_TIME] <= FAR
        && usable(memory[TURNED], FAR);
    return posed && ramp && watched && motion && base && ages && usable(memory[INTEGRAL], FAR);
}

static void fresh(double *out, long rows, double time, double v, double w, double period, double stale_after, double slowest)
{
    memset(out, 0, HEAD * sizeof *out);
    out[TIME] = time - period;
    out[SPEED] = v;
    out[TURN_RATE] = w;
    out[X] = out[Y] = out[HEADING] = NAN;
    out[POSE_AGE] = INFINITY;
    out[BASE_AGE] = stale_after;
    out[BASE_SPEED] = v;
    out[BASE_TURN_RATE] = w;
    out[GOAL_X] = out[GOAL_Y] = out[HEADING_BEFORE] = NAN;
    out[RAMP_SPEED] = v;
    out[RAMP_TURN_RATE] = w;
    out[SLOWEST] = slowest;
    out[WATCH_X] = NAN;
    out[NEAREST] = NAN;
    for (long i = 0; i < rows; i++) {
        out[HEAD + 3 * i] = i * period;
        out[HEAD + 3 * i + 1] = v;
        out[HEAD + 3 * i + 2] = w;
    }
}

static void remember(const double *memory, double *out, const Commands *c, double stale_after, double v, double w)
{
    double base = memory[BASE_AGE] + c->since;
    double base_age = least(base, stale_after);
    Motion base_motion = motion_then(c, -base, -base_age, memory[BASE_SPEED], memory[BASE_TURN_RATE]);
    out[BASE_AGE] = base_age;
    out[BASE_SPEED] = base_motion.v;
    out[BASE_TURN_RATE] = base_motion.w;
    for (long i = c->rows - 1; i > 0; i--) {
        long j = HEAD + 3 * i;
        out[j] = memory[j - 3] + c->since;
        out[j + 1] = i > 1 ? memory[j - 2] : c->last.v;
        out[j + 2] = i > 1 ? memory[j - 1] : c->last.w;
    }
    out[HEAD] = 0.0;
    out[HEAD + 1] = out[SPEED] = v;
    out[HEAD + 2] = out[TURN_RATE] = w;
}

/* answering */

static bool watch(
    const double *memory, double *out, bool new_pose, Pose p, Motion told, double since, double blur, double half_track,
    double patience, double top, double highest)
{
    double slowest = memory[SLOWEST], silent = memory[SILENT];
    double path = memory[WATCH_PATH], turn = memory[WATCH_TURN], time = memory[WATCH_TIME];
    Pose at = {memory[WATCH_X], memory[WATCH_Y], memory[WATCH_HEADING]};
    if (new_pose && at.x != at.x) {
        ENTER(WATCH_BEGINS);
        at = p;
    }
    double wheel = fabs(told.v) + fabs(told.w) * half_track;
    if (wheel > ANSWERING_LEAST * most(slowest, ANSWERING_FIRST * top)) {
        ENTER(WATCH_TOLD);
        path += told.v * since;
        turn += told.w * since;
        time += since;
    } else
        ENTER(WATCH_NOT_TOLD);
    if (new_pose) {
        double dx = p.x - at.x, dy = p.y - at.y;
        double seen = sqrt(dx * dx + dy * dy) + fabs(difference(p.heading, at.heading)) * half_track;
        double due = fabs(path) + fabs(turn) * half_track;
        if (seen > most(ANSWERING_BLUR * blur, ANSWERING_SEEN * due)) {
            ENTER(WATCH_ANSWERED);
            at = p;
            path = turn = time = silent = 0.0;
        } else if (time > patience
                   && due > most(most(2.0 * ANSWERING_BLUR * blur, 0.5 * patience * slowest), ANSWERING_LEAST_DUE)) {
            ENTER(WATCH_SILENT);
            path = turn = time = 0.0;
            silent = 1.0;
            if (wheel <= most(highest, slowest)) {
                ENTER(WATCH_RAISED);
                slowest = least(
                    most(most(ANSWERING_RAISE * slowest, ANSWERING_FIRST * top), wheel), most(highest, slowest));
            } else
                ENTER(WATCH_NOT_RAISED);
        } else {
            ENTER(WATCH_WAITS);
            if (time > patience && due > most(2.0 * ANSWERING_BLUR * blur, 0.5 * patience * slowest))
                ENTER(WATCH_LITTLE_DUE);
        }
    } else
        ENTER(WATCH_BLIND);
    out[SLOWEST] = slowest;
    out[SILENT] = silent;
    out[WATCH_PATH] = path;
    out[WATCH_TURN] = turn;
    out[WATCH_TIME] = time;
    out[WATCH_X] = at.x;
    out[WATCH_Y] = at.y;
    out[WATCH_HEADING] = at.heading;
    return silent != 0.0;
}

/* intake */

static Clock clock_of(double time, double last, double period, double stale_after)
{
    double since = time - last;
    bool good = usable(time, FAR) && 0.0 < since && since <= stale_after + period;
    return (Clock){good ? since : period, good};
}

static Seen seen_in(const double *measured)
{
    double v = measured[M_SPEED], w = measured[M_TURN_RATE], speed_limit = measured[M_SPEED_LIMIT];
    bool wrong = measured[M_GARBAGE] != 0.0 || speed_limit < 0.0;
    if (speed_limit != speed_limit)
        speed_limit = INFINITY;
    if (v == v && !usable(v, FAST)) {
        v = NAN;
        wrong = true;
    }
    if (w == w && !usable(w, FAST)) {
        w = NAN;
        wrong = true;
    }
    return (Seen){{v, w}, most(speed_limit, 0.0), wrong ? BAD_FIELD : 0};
}

static Before before_of(const double *memory, const double *measured, double wheel, double half_track)
{
    double v = measured[M_APPLIED_SPEED], w = measured[M_APPLIED_TURN_RATE];
    if (fabs(v) + fabs(w) * half_track <= INTAKE_BELIEVED * wheel)
        return (Before){{v, w}, {v, w}, APPLIED_BY_OTHERS};
    int trouble = v == v || w == w ? BAD_FIELD : 0;
    return (Before){{memory[SPEED], memory[TURN_RATE]}, {memory[RAMP_SPEED], memory[RAMP_TURN_RATE]}, trouble};
}

static Posed pose_of(const double *memory, const double *measured, double since, double period, double stale_after)
{
    double time = measured[M_TIME], x = measured[M_X], y = measured[M_Y], heading = measured[M_HEADING];
    double pose_time = measured[M_POSE_TIME];
    double age = pose_time != pose_time ? 0.0 : time - pose_time;
    bool posed = usable(x, FAR) && usable(y, FAR) && usable(heading, FAR);
    bool local = measured[M_GOAL_FRAME] == INTAKE_ROBOT && !posed;
    double known_age = memory[POSE_AGE] + since;
    if (!(-0.5 * period <= age && age <= FAR && (posed || local)))
        return (Posed){{memory[X], memory[Y], memory[HEADING]}, known_age, false, BAD_POSE};
    if (age > stale_after + 1e-9 && known_age < age && !local)
        return (Posed){{memory[X], memory[Y], memory[HEADING]}, known_age, false, STALE_POSE};
    if (local)
        return (Posed){{0.0, 0.0, 0.0}, most(age, 0.0), true, 0};
    return (Posed){{x, y, wrap(heading)}, most(age, 0.0), false, 0};
}

static bool jumped_to(const double *memory, const double *s, Pose p, double span, double v, double w)
{
    double dx = p.x - memory[X];
    double dy = p.y - memory[Y];
    double far = most(most(s[S_TOP_SPEED], s[S_REVERSE_SPEED]), v) * span + INTAKE_SIGMAS * s[S_POSITION_NOISE];
    double turned = difference(p.heading, memory[HEADING]);
    return dx * dx + dy * dy > far * far
        || fabs(turned) > most(s[S_TOP_TURN_RATE], w) * span + INTAKE_SIGMAS * s[S_HEADING_NOISE];
}

static Goal goal_of(const double *memory, const double *measured, Pose p, bool local, double radius)
{
    Point goal = {measured[M_GOAL_X], measured[M_GOAL_Y]};
    double frame = measured[M_GOAL_FRAME];
    if (!(usable(goal.x, FAR) && usable(goal.y, FAR) && (frame == 0.0 || frame == INTAKE_ROBOT)))
        return (Goal){{NAN, NAN}, false, false, NAN};
    if (frame == INTAKE_ROBOT)
        goal = to_world(p, goal.x, goal.y);
    double moved = distance_to(memory[GOAL_X], memory[GOAL_Y], goal.x, goal.y);
    if (local && memory[GOAL_LOCAL] != 0.0)
        moved = 0.0;
    return (Goal){goal, true, !(moved <= radius), moved};
}

static Next next_goal(const double *measured, Pose p)
{
    Point next = {measured[M_NEXT_GOAL_X], measured[M_NEXT_GOAL_Y]};
    if (!(usable(next.x, FAR) && usable(next.y, FAR))) {
        bool given = next.x == next.x || next.y == next.y;
        if (given)
            ENTER(NEXT_GOAL_BAD);
        else
            ENTER(NEXT_GOAL_NONE);
        return (Next){{NAN, NAN}, given ? BAD_FIELD : 0};
    }
    if (measured[M_GOAL_FRAME] == INTAKE_ROBOT) {
        ENTER(NEXT_GOAL_ROBOT);
        next = to_world(p, next.x, next.y);
    } else
        ENTER(NEXT_GOAL_WORLD);
    return (Next){next, 0};
}

/* step */

static double turning_on(double error, double w, double blur)
{
    if (fabs(error) > STEP_PI - least(blur, 0.5) && error * w < 0.0)
        return error - copysign(2.0 * STEP_PI, error);
    return error;
}

static bool touched(Pose p, Motion motion, Motion command, double span, double lag, double x1, double y1, double near)
{
    for (int i = 0; i < 4; i++) {
        Moving next = hold(p, motion, command, 0.25 * span, lag);
        Pose q = next.pose;
        motion = next.motion;
        double dx = q.x - p.x, dy = q.y - p.y;
        double square = dx * dx + dy * dy;
        double share = square > 0.0 ? clip(((x1 - p.x) * dx + (y1 - p.y) * dy) / square, 0.0, 1.0) : 0.0;
        if (distance_to(p.x + share * dx, p.y + share * dy, x1, y1) <= near)
            return true;
        p = q;
    }
    return false;
}

static double passed_within(const double *s, double v)
{
    double far = s[S_CAPTURE_RADIUS] + most(v, 0.0) * (s[S_DEAD_TIME] + s[S_MOTOR_LAG] + 3.0 * s[S_PERIOD]);
    return far * far;
}

static Wanted scheduled(
    const double *s, double distance, double error, Motion before, double top, double slowest, bool stopping, double settled,
    bool way_point, double next_turn, double next_distance, bool on_the_spot)
{
    double capture_radius = s[S_CAPTURE_RADIUS], stop_radius = s[S_STOP_RADIUS], target_radius = s[S_AIM_RADIUS];
    double acceleration = s[S_ACCELERATION], braking = s[S_BRAKING], turn_acceleration = s[S_TURN_ACCELERATION];
    double period = s[S_PERIOD], half_track = s[S_HALF_TRACK], settling = s[S_SETTLING];
    double turn = least(s[S_TOP_TURN_RATE], s[S_WHEEL_SPEED] / half_track);
    double passing = 0.0;
    if (way_point)
        passing = passing_speed(
            next_turn, next_distance, capture_radius, target_radius, top, turn, braking, turn_acceleration, period);
    else {
        double within = stopping ? capture_radius : stop_radius;
        if (stops(distance, error, before.v, before.w, within, settled, braking, turn_acceleration, period, slowest))
            return (Wanted){0.0, 0.0, SCHEDULE_BRAKING, true};
    }
    Wanted found = schedule(
        distance, error, before.v, before.w, passing, capture_radius, target_radius, top, turn, acceleration, braking,
        turn_acceleration, period, settling, slowest, half_track, on_the_spot);
    found.stopping = found.v == 0.0 && found.w == 0.0;
    return found;
}

static Constant constant(
    const double *s, Pose p, Motion ramp, Point goal, double progress, bool way_point, bool stays, double slowest, Pose seen,
    double last_w, double blur, double integral, double heading_before, double since)
{
    double cruise = s[S_CRUISE], ceiling = s[S_CEILING], gain = s[S_GAIN], heading = p.heading;
    Approach found = constant_speed(
        p, ramp, goal.x, goal.y, progress, cruise, s[S_AIM_RADIUS], s[S_STOP_RADIUS], s[S_CAPTURE_RADIUS], s[S_REST_RADIUS],
        s[S_BRAKING], s[S_TURN_ACCELERATION], s[S_PERIOD]);
    double bearing = found.bearing, speed = found.speed;
    progress = found.progress;
    if (way_point) {
        ENTER(CONSTANT_WAY_POINT);
        speed = cruise;
        progress = APPROACH_ON_THE_WAY;
    }
    if (s[S_PREDICT] == 0.0) {
        heading = seen.heading;
        bearing = bearing_to(seen.x, seen.y, goal.x, goal.y);
    }
    double error = difference(bearing, heading);
    if (stays || speed == 0.0)
        return (Constant){0.0, 0.0, SCHEDULE_FREE, progress, 0.0, error, 0.0, heading};
    speed = most(speed, slowest);
    double rate = heading_rate(heading, heading_before, since);
    double error_to = turning_on(error, last_w, blur);
    double asked = gain * (error_to + integral / s[S_INTEGRAL_TIME] - s[S_DERIVATIVE_TIME] * rate);
    double turn_rate = clip(asked, -ceiling, ceiling);
    double why = speed >= cruise ? SCHEDULE_FREE : SCHEDULE_BRAKING;
    return (Constant){speed, turn_rate, why, progress, integral, error, asked, heading};
}

static double slowed_by(double v, double wanted, double why, int bound, double top, double fastest, bool stopped)
{
    if (stopped)
        return SLOWING_STOPPING;
    if (v < least(wanted, top) - LIMITS_ROUNDING)
        return bound & WHEEL_SPEED_LIMIT ? SLOWING_WHEEL_LIMIT : SLOWING_ACCELERATION;
    if (why != SCHEDULE_FREE)
        return why;
    return top < fastest ? SLOWING_STEP_LIMIT : SLOWING_NONE;
}

/* One step; `out` may be `memory` itself, and neither overlaps `measured` or `result`. */
void step_apart(const double *settings, const double *memory, long size, const double *measured, double *out, double *result)
{
    const double *s = settings;
    double period = s[S_PERIOD], dead_time = s[S_DEAD_TIME], lag = s[S_MOTOR_LAG], top = s[S_TOP_SPEED];
    double reverse = s[S_REVERSE_SPEED], turn = s[S_TOP_TURN_RATE], wheel = s[S_WHEEL_SPEED], half_track = s[S_HALF_TRACK];
    double acceleration = s[S_ACCELERATION], braking = s[S_BRAKING], turn_acceleration = s[S_TURN_ACCELERATION];
    double capture_radius = s[S_CAPTURE_RADIUS], stay_radius = s[S_STAY_RADIUS], stop_radius = s[S_STOP_RADIUS];
    double cruise = s[S_CRUISE], integral_time = s[S_INTEGRAL_TIME];
    double stale_after = s[S_STALE_AFTER], rest_radius = s[S_REST_RADIUS];
    bool by_schedule = s[S_SCHEDULED] != 0.0;
    long rows = (size - HEAD) / 3;
    double time = measured[M_TIME];
    if (!sound(memory, rows)) {
        double slowest = s[S_SMALLEST_WHEEL_SPEED];
        fresh(out, rows, usable(time, FAR) ? time + period : NAN, 0.0, 0.0, period, stale_after, slowest);
        const double nothing[RESULT] = {
            0, 0, 0, 0, PHASE_HELD, BAD_MEMORY, NAN, NAN, NAN, NAN, NAN, INFINITY, NAN, NAN, 0, 0, SLOWING_STOPPING, slowest};
        memcpy(result, nothing, sizeof nothing);
        return;
    }

    /* What is known: the time, the command before, the pose and its age, the motion at that time, the goal. */
    Clock clock = clock_of(time, memory[TIME], period, stale_after);
    double since = clock.since;
    Seen seen = seen_in(measured);
    Before before = before_of(memory, measured, wheel, half_track);
    Motion last = before.last, ramp = before.ramp;
    Posed posed = pose_of(memory, measured, since, period, stale_after);
    double age = posed.age;
    int causes = seen.trouble | before.trouble | posed.trouble | (clock.good ? 0 : BAD_CLOCK);
    bool known = age <= stale_after + 1e-9;
    if (!known && age <= FAR)
        causes |= STALE_POSE;
    Commands under_way = {memory + HEAD, rows, since, last, dead_time, lag};
    Motion motion = motion_then(
        &under_way, -(memory[BASE_AGE] + since), -least(age, stale_after), memory[BASE_SPEED], memory[BASE_TURN_RATE]);
    Motion told = motion_then(&under_way, -least(age, stale_after), 0.0, motion.v, motion.w);
    if (seen.motion.v == seen.motion.v)
        motion.v = seen.motion.v;
    if (seen.motion.w == seen.motion.w)
        motion.w = seen.motion.w;
    bool located = posed.trouble == 0 && !posed.local;
    bool jumped = false;
    if (located && memory[POSE_AGE] <= FAR) {
        double span = fabs(memory[POSE_AGE] + since - age) + period;
        double fastest_v = most(fabs(motion.v), fabs(last.v)), fastest_w = most(fabs(motion.w), fabs(last.w));
        jumped = jumped_to(memory, settings, posed.pose, span, fastest_v, fastest_w);
    }
    double fastest = cruise;
    top = least(top, seen.limit);
    if (posed.trouble != 0)
        top = least(top, most(last.v, 0.0));
    double blur = s[S_POSITION_NOISE] + s[S_HEADING_NOISE] * half_track;
    if (ANSWERING_SILENT_PERIODS * period < ANSWERING_SILENT_TIME)
        ENTER(PATIENCE_TIME);
    else
        ENTER(PATIENCE_PERIODS);
    double patience = most(ANSWERING_SILENT_PERIODS * period, ANSWERING_SILENT_TIME) + dead_time + lag + least(age, stale_after);
    bool new_pose = located && !(age > memory[POSE_AGE] + since - 1e-9);
    if (located && !new_pose)
        ENTER(WATCH_REPEATED);
    double most_raised = least(s[S_MOST_RAISED], top);
    if (watch(memory, out, new_pose, posed.pose, told, since, blur, half_track, patience, fastest, most_raised))
        causes |= NO_ANSWER;
    double slowest = least(least(out[SLOWEST], s[S_MOST_RAISED]), top);
    if (slowest > s[S_SMALLEST_WHEEL_SPEED])
        ENTER(SLOWEST_RAISED);
    if (slowest < least(out[SLOWEST], top))
        ENTER(SLOWEST_CAPPED_BY_SETTING);
    if (slowest < least(out[SLOWEST], s[S_MOST_RAISED]))
        ENTER(SLOWEST_CAPPED_BY_STEP);
    slowest = slowest_of(most(s[S_SMALLEST_WHEEL_SPEED], slowest), s[S_WHEEL_SPEED_STEP]);
    Goal goal = goal_of(memory, measured, posed.pose, posed.local, capture_radius);
    Next next = next_goal(measured, posed.pose);
    causes |= next.trouble;
    Point given = goal.point;
    bool way_point = goal.aimed && next.point.x == next.point.x;
    bool passed = memory[PROGRESS] == STEP_PASSED
        && goal.moved <= most(stay_radius - capture_radius, STEP_SAME * capture_radius);
    if (passed && posed.local) {
        double ahead = measured[M_GOAL_X], left = measured[M_GOAL_Y];
        passed = ahead * ahead + left * left <= passed_within(settings, motion.v);
        if (passed)
            ENTER(SIGHTED_SAME);
        else
            ENTER(SIGHTED_OTHER);
    }
    bool was_passed = passed && !way_point && next.trouble != 0;
    if (was_passed)
        ENTER(PASSED_NEXT_BAD);
    passed = passed && way_point;
    if (passed) {
        ENTER(PASSED_BEFORE);
        goal.point = next.point;
        way_point = false;
    }
    if (jumped)
        causes |= POSE_JUMPED;
    if (!goal.aimed)
        causes |= BAD_GOAL;
    if (measured[M_HOLD] != 0.0 && measured[M_HOLD] == measured[M_HOLD])
        causes |= TOLD_TO_HOLD;
    bool held = (causes & (TOLD_TO_HOLD | BAD_CLOCK | BAD_GOAL)) != 0 || !known;

    /* Now, and when the new command takes effect. */
    Moving now = {{NAN, NAN, NAN}, motion};
    double distance = NAN, error = NAN;
    bool rest = false;
    if (known) {
        now = carry(&under_way, -age, 0.0, posed.pose, motion);
        rest = fabs(now.motion.v) + fabs(now.motion.w) * half_track < STEP_REST;
        if (fabs(seen.motion.v) >= STEP_REST || fabs(seen.motion.w) * half_track >= STEP_REST)
            rest = false;
        if (goal.aimed)
            distance = distance_to(now.pose.x, now.pose.y, goal.point.x, goal.point.y);
    }
    bool stood = memory[STAYS] != 0.0 && !goal.fresh;
    bool same_place = goal.moved <= stay_radius - capture_radius;
    bool stays = stood && distance <= (same_place ? stay_radius : capture_radius) && !way_point;
    bool kept = !goal.aimed && memory[PROGRESS] == STEP_PASSED;
    if (kept)
        ENTER(PASSED_GOAL_BAD);
    double integral = 0.0, heading_before = NAN, why = SCHEDULE_FREE;
    double progress = passed || was_passed || kept ? STEP_PASSED : APPROACH_ON_THE_WAY;
    double asked = 0.0, wanted_v = 0.0, wanted_w = 0.0, settled = rest_radius, turned = 0.0, nearest = NAN;
    bool stopping = true;
    Moving then = {{NAN, NAN, NAN}, motion};
    if (!held) {
        then = carry(&under_way, 0.0, dead_time, now.pose, now.motion);
        Pose end = arc(then.pose, then.motion.v, then.motion.w, lag);
        bool passes = way_point && distance_to(then.pose.x, then.pose.y, goal.point.x, goal.point.y) <= stop_radius;
        double away = distance_to(end.x, end.y, goal.point.x, goal.point.y);
        double bearing = bearing_to(end.x, end.y, goal.point.x, goal.point.y);
        if (passes) {
            ENTER(PASSED_BY_COMMITTED);
            progress = STEP_PASSED;
            way_point = false;
            goal.point = next.point;
            away = distance_to(end.x, end.y, goal.point.x, goal.point.y);
            bearing = bearing_to(end.x, end.y, goal.point.x, goal.point.y);
            distance = distance_to(now.pose.x, now.pose.y, goal.point.x, goal.point.y);
        }
        bool goes_on = same_place && progress != STEP_PASSED && memory[PROGRESS] != STEP_PASSED;
        double went = goes_on ? memory[PROGRESS] : APPROACH_ON_THE_WAY;
        double blur_of_error = 6.0 * (s[S_HEADING_NOISE] + s[S_POSITION_NOISE] / most(distance, capture_radius));
        if (by_schedule) {
            ENTER(SCHEDULE_LAW);
            error = difference(bearing, end.heading);
            double turning_to = turning_on(error, last.w, blur_of_error);
            if (went == STEP_STOPPING) {
                ENTER(SETTLING_IN);
                settled = capture_radius;
            }
            bool other_goal = jumped || progress == STEP_PASSED || !same_place;
            Circling path = circling(away, memory[TURNED], memory[NEAREST], last.w, since, other_goal);
            turned = path.turned;
            nearest = path.nearest;
            double next_turn = 0.0, next_away = NAN;
            if (way_point) {
                next_away = distance_to(goal.point.x, goal.point.y, next.point.x, next.point.y);
                next_turn = difference(bearing_to(goal.point.x, goal.point.y, next.point.x, next.point.y), bearing);
            }
            Wanted wanted = scheduled(
                settings, away, turning_to, ramp, top, slowest, went == STEP_STOPPING, settled, way_point, next_turn, next_away,
                path.circles);
            wanted_v = wanted.v;
            wanted_w = wanted.w;
            why = wanted.why;
            stopping = wanted.stopping;
            if (wanted_w == 0.0 && wanted_v > 0.0)
                turned = 0.0;
            if (stays) {
                ENTER(STAYING);
                wanted_v = wanted_w = 0.0;
                stopping = true;
            }
            if (progress != STEP_PASSED)
                progress = stopping ? STEP_STOPPING : APPROACH_ON_THE_WAY;
        } else {
            ENTER(CONSTANT_LAW);
            double heading_then = jumped || posed.local ? NAN : memory[HEADING_BEFORE];
            Constant found = constant(
                settings, end, ramp, goal.point, went, way_point, stays, slowest, posed.pose, last.w, blur_of_error,
                goal.fresh || jumped ? 0.0 : memory[INTEGRAL], heading_then, since);
            wanted_v = found.v;
            wanted_w = found.w;
            why = found.why;
            integral = found.integral;
            error = found.error;
            asked = found.asked;
            heading_before = found.heading;
            progress = progress != STEP_PASSED ? found.progress : STEP_PASSED;
            stopping = wanted_v == 0.0;
            if (fabs(asked) > s[S_CEILING])
                causes |= TURN_RATE_LIMIT;
        }
        if (top < slowest) {
            ENTER(TOO_SLOW_A_STEP);
            wanted_v = 0.0;
        }
    }

    /* The command, within the limits. */
    double share = least(since, period);
    double faster = acceleration * share, slower = braking * share, turning = turn_acceleration * share;
    Limited limited = by_schedule && !held
        ? turn_first(ramp, wanted_v, wanted_w, top, turn, wheel, half_track, faster, slower, turning)
        : limit(ramp, wanted_v, wanted_w, top, reverse, turn, wheel, half_track, faster, slower, turning);
    causes |= limited.bound;
    Gridded sent = on_grid(
        (Motion){limited.v, limited.w}, wanted_v, wanted_w, slowest, s[S_WHEEL_SPEED_STEP], top, turn, wheel, half_track);
    Motion command = sent.command;
    if (wanted_v != 0.0 && integral_time < INFINITY)
        integral = clip(integrate(integral, error, asked, command.w, share), -FAR, FAR);
    if (way_point && !held) {
        if (touched(then.pose, then.motion, command, period, lag, goal.point.x, goal.point.y, stop_radius)) {
            ENTER(PASSED_BY_TOUCH);
            if (lag > 0.0)
                ENTER(TOUCH_BEHIND_LAG);
            progress = STEP_PASSED;
        } else
            ENTER(TOUCH_MISSED);
    }
    int phase = PHASE_DRIVING;
    if (held)
        phase = PHASE_HELD;
    else if (progress == STEP_PASSED) {
        phase = PHASE_PASSED;
        if (command.v == 0.0 && command.w == 0.0 && rest && !way_point && (stays || distance <= settled))
            ENTER(PASSED_AT_REST);
    } else if (command.v == 0.0 && command.w == 0.0 && rest && !way_point && (stays || distance <= settled))
        phase = PHASE_ARRIVED;

    /* The new memory; out may be memory, so each place is read before it is written. */
    remember(memory, out, &under_way, stale_after, command.v, command.w);
    out[TIME] = usable(time, FAR) ? time : memory[TIME] + period;
    out[X] = posed.local ? NAN : posed.pose.x;
    out[Y] = posed.local ? NAN : posed.pose.y;
    out[HEADING] = posed.local ? NAN : posed.pose.heading;
    out[POSE_AGE] = posed.local ? INFINITY : age;
    out[RAMP_SPEED] = sent.ramp.v;
    out[RAMP_TURN_RATE] = sent.ramp.w;
    if ((held || phase == PHASE_ARRIVED) && command.v == 0.0 && command.w == 0.0) {
        if (out[SILENT] != 0.0 && held)
            ENTER(SILENT_CLEARED_HELD);
        else if (out[SILENT] != 0.0)
            ENTER(SILENT_CLEARED_ARRIVED);
        out[SILENT] = 0.0;
    }
    stays = phase == PHASE_ARRIVED || (held ? stood : stays);
    bool aims = goal.aimed && !(stays && stood);
    out[GOAL_X] = aims ? (posed.local ? NAN : given.x) : memory[GOAL_X];
    out[GOAL_Y] = aims ? (posed.local ? NAN : given.y) : memory[GOAL_Y];
    out[GOAL_LOCAL] = aims ? (posed.local ? 1.0 : 0.0) : memory[GOAL_LOCAL];
    out[INTEGRAL] = integral;
    out[HEADING_BEFORE] = heading_before;
    out[TURNED] = clip(turned, -FAR, FAR);
    out[NEAREST] = nearest;
    out[PROGRESS] = progress;
    out[PHASE] = phase;
    out[STAYS] = stays ? 1.0 : 0.0;

    double slowed = slowed_by(command.v, wanted_v, why, limited.bound, top, fastest, held || phase == PHASE_ARRIVED || stopping);
    if (by_schedule && slowed == SLOWING_STEP_LIMIT)
        causes |= SPEED_LIMIT;
    if (by_schedule && fabs(wanted_w) >= least(turn, wheel / half_track))
        causes |= TURN_RATE_LIMIT;
    double half = 0.5 * command.w * (2.0 * half_track);
    const double all[RESULT] = {
        command.v - half, command.v + half, command.v, command.w, phase, causes, error, distance,
        now.pose.x, now.pose.y, now.pose.heading, age, goal.point.x, goal.point.y, wanted_v, wanted_w, slowed, slowest};
    memcpy(result, all, sizeof all);
}

/* For the proof: parts alone, each on a row of its arguments. */
void stop_end_alone(const double *n, double *out)
{
    Pose p = stop_end((Pose){n[0], n[1], n[2]}, n[3], n[4], n[5], n[6], n[7]);
    out[0] = p.x;
    out[1] = p.y;
}

void limit_alone(const double *n, double *out)
{
    Limited found = limit((Motion){n[0], n[1]}, n[2], n[3], n[4], n[5], n[6], n[7], n[8], n[9], n[10], n[11]);
    out[0] = found.v;
    out[1] = found.w;
    out[2] = found.bound;
}

void turn_first_alone(const double *n, double *out)
{
    Limited found = turn_first((Motion){n[0], n[1]}, n[2], n[3], n[4], n[5], n[6], n[7], n[8], n[9], n[10]);
    out[0] = found.v;
    out[1] = found.w;
    out[2] = found.bound;
}

void schedule_alone(const double *n, double *out)
{
    Wanted found = schedule(
        n[0], n[1], n[2], n[3], n[4], n[5], n[6], n[7], n[8], n[9], n[10], n[11], n[12], n[13], n[14], n[15],
        n[16] != 0.0);
    out[0] = found.v;
    out[1] = found.w;
    out[2] = found.why;
}

void stops_alone(const double *n, double *out) { *out = stops(n[0], n[1], n[2], n[3], n[4], n[5], n[6], n[7], n[8], n[9]); }

void cut_stop_alone(const double *n, double *out) { *out = cut_stop(n[0], n[1], n[2], n[3]); }

void passed_within_alone(const double *n, double *out) { *out = passed_within(n, n[S_MOST_RAISED + 1]); }

void touched_alone(const double *n, double *out)
{
    *out = touched((Pose){n[0], n[1], n[2]}, (Motion){n[3], n[4]}, (Motion){n[5], n[6]}, n[7], n[8], n[9], n[10], n[11]);
}

void watch_alone(const double *n, double *out)
{
    const double *m = n + HEAD;
    memcpy(out, n, HEAD * sizeof *out);
    watch(n, out, m[0] != 0.0, (Pose){m[1], m[2], m[3]}, (Motion){m[4], m[5]}, m[6], m[7], m[8], m[9], m[10], m[11]);
}

void on_grid_alone(const double *n, double *out)
{
    Gridded found = on_grid((Motion){n[0], n[1]}, n[2], n[3], n[4], n[5], n[6], n[7], n[8], n[9]);
    out[0] = found.command.v;
    out[1] = found.command.w;
    out[2] = found.ramp.v;
    out[3] = found.ramp.w;
}

/* The robot's fixed buffers: settings, and a row [memory of `size` | measurement | result]. */
typedef struct { const double *settings; double *row; long size; } Robot;

/* One step on the fixed buffers, behind a single pointer: the leanest call. */
void step_in_place(const Robot *robot)
{
    double *memory = robot->row, *measured = memory + robot->size;
    step_apart(robot->settings, memory, robot->size, measured, memory, measured + MEASURED);
}

/* The same with the buffers as arguments: the call as it is usually written. */
void step_row(const double *settings, double *row, long size)
{
    step_in_place(&(Robot){settings, row, size});
}

/* A whole drive: `steps` measurements, one after another, on one memory. */
void step_many(const double *settings, double *memory, long size, const double *measured, long steps, double *result)
{
    for (long k = 0; k < steps; k++)
        step_apart(settings, memory, size, measured + MEASURED * k, memory, result);
}
