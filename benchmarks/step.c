/* The step in C: the same work as step_kernel of src/steerkit/step.py and the kernels that it calls, in the same order of operations.
 *
 * The yardstick for benchmarks/step.py, which compiles this file, proves that it gives the numbers of the Python kernels, and times
 * both. One function here for each kernel there, under its name without "_kernel". SI units. No part of the package.
 *
 * Compile without reassociation and without contraction (-ffp-contract=off): then the bits agree as well.
 */

#include <math.h>
#include <stdbool.h>
#include <string.h>

#define FAR 1e12
#define FAST 1e4
#define REST 0.01
#define BELIEVED 2.0
#define SIGMAS (6.0 * sqrt(2.0))
#define SHORTEST 1e-6
#define NEAR 1e-3
#define AHEAD 0.5
#define TRANSIENT 3.0
#define ROUNDING 1e-9
#define PI 3.141592653589793

/* Places in a memory row, in a measurement and in the settings. */
enum { TIME, SPEED, TURN_RATE, X, Y, HEADING, POSE_AGE, BASE_AGE, BASE_SPEED, BASE_TURN_RATE };
enum { GOAL_X = 10, GOAL_Y, INTEGRAL, HEADING_BEFORE, PROGRESS, PHASE, GOAL_LOCAL, STAYS, HEAD };
enum { MEASURED = 15, RESULT = 16 };
enum { DRIVING, ARRIVED, HELD };
enum { ON_THE_WAY, CAPTURED, STOPPING };
enum {
    SPEED_LIMIT = 1, TURN_RATE_LIMIT = 2, WHEEL_SPEED_LIMIT = 4, ACCELERATION_LIMIT = 8, BRAKING_LIMIT = 16,
    TURN_ACCELERATION_LIMIT = 32, TOLD_TO_HOLD = 64, BAD_POSE = 128, STALE_POSE = 256, POSE_JUMPED = 512, BAD_GOAL = 1024,
    BAD_CLOCK = 2048, BAD_FIELD = 4096, BAD_MEMORY = 8192, APPLIED_BY_OTHERS = 16384
};

typedef struct { double x, y, heading; } Pose;
typedef struct { double v, w; } Motion;
typedef struct { Pose pose; Motion motion; } Moving;
typedef struct { double v, w; int bound; } Limited;
typedef struct { double bearing, distance, speed, progress; } Approach;
typedef struct { double x, y; } Point;
typedef struct { double begin, until; } Span;

/* Commands under way, and the newest of them, which stands for the first row. */
typedef struct { const double *row; long rows; double since; Motion last; double dead_time, lag; } Commands;

/* min and max of Python: the first one where they are equal or not comparable. */
static double least(double a, double b) { return b < a ? b : a; }
static double most(double a, double b) { return b > a ? b : a; }

/* angles */

static double wrap(double angle)
{
    if (-PI < angle && angle <= PI)
        return angle;
    if (!(-INFINITY < angle && angle < INFINITY))
        return NAN;
    double wrapped = atan2(sin(angle), cos(angle));
    return wrapped > -PI ? wrapped : PI;
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
        bound |= v > top + ROUNDING || v < -reverse - ROUNDING ? SPEED_LIMIT : 0;
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
    if (side * share > wheel * (1.0 + ROUNDING)) {
        share = wheel / side;
        bound |= WHEEL_SPEED_LIMIT;
    }

    Point range = reach(before.v, faster, slower);
    double low = range.x, high = range.y;
    double v1 = clip(share * v, low, high);
    if (fabs(v1 - share * v) > ROUNDING)
        bound |= (v1 - share * v) * before.v > 0.0 ? BRAKING_LIMIT : ACCELERATION_LIMIT;
    if (v * v1 > 0.0 && fabs(v1) > fabs(share * v))
        share = most(share, least(1.0, v1 / v));

    double aim = clip(share * w, -turn, turn);
    if (v == 0.0 && w == 0.0 && before.v != 0.0)
        aim = clip(before.w * most(0.0, v1 / before.v), -turn, turn);
    double w1 = clip(aim, before.w - turning, before.w + turning);
    if (fabs(w1 - aim) > ROUNDING)
        bound |= TURN_ACCELERATION_LIMIT;

    side = fabs(v1) + fabs(w1) * half_track;
    if (side > wheel * (1.0 + ROUNDING)) {
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

static double held_stop(double speed, double braking, double period)
{
    double step = braking * period;
    double n = floor(speed / step);
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
    double n = floor((sqrt(1.0 + 8.0 * u) - 1.0) / 2.0);
    return least(top, (n + (u - n * (n + 1.0) / 2.0) / (n + 1.0)) * step);
}

/* heading */

static double heading_rate(double heading, double before, double duration)
{
    double turned = difference(heading, before);
    return turned == turned && duration > SHORTEST ? turned / duration : 0.0;
}

static double integrate(double integral, double error, double asked, double given, double duration)
{
    if ((asked - given) * error > 0.0)
        return integral;
    return integral + error * duration;
}

/* prediction */

static const double G1 = 0.5 - 0.5 * 0.861136311594053, G2 = 0.5 - 0.5 * 0.339981043584856;
static const double H1 = 0.5 * 0.347854845137454, H2 = 0.5 * 0.652145154862546;

static double respond(double value, double command, double duration, double lag)
{
    if (!(lag > 0.0))
        return command;
    return command + (value - command) * exp(-duration / lag);
}

static Pose lagged_arc(Pose p, Motion motion, Motion command, double duration, double lag)
{
    const double shares[4] = {G1, G2, 1.0 - G2, 1.0 - G1}, weights[4] = {H1, H2, H2, H1};
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
    double first = least(duration, TRANSIENT * lag);
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

/* For the proof: two parts alone. Of the one a step sees only on which side of a circle it is, of the other no way backwards. */
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
    if (cos(error) <= 0.0 || (fabs(error) > AHEAD && fabs(across) > radius))
        return distance <= radius ? 0.0 : INFINITY;
    return distance * cos(error) - sqrt(most(0.0, radius * radius - across * across));
}

static bool stop_kept(
    Pose p, Motion before, double goal_x, double goal_y, double radius, double braking, double turn_acceleration, double path)
{
    if (before.v > 0.0 && fabs(before.w) * path > PI * before.v) {
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
        return (Approach){bearing, distance, 0.0, STOPPING};
    double slower = most(0.0, before.v - braking * period);
    double path = held_stop(slower, braking, period);
    double way = way_ahead(distance, difference(bearing, p.heading), aim_radius);
    double speed = way == INFINITY ? cruise : held_speed(way, braking, period, cruise);
    double reached = progress != ON_THE_WAY || distance <= capture_radius ? CAPTURED : ON_THE_WAY;
    if (reached == CAPTURED) {
        double near = distance - aim_radius;
        speed = least(speed, near > NEAR * capture_radius ? held_speed(near, braking, period, cruise) : 0.0);
    }
    if (NEAR * capture_radius < way && way < INFINITY && path <= way + aim_radius)
        return (Approach){bearing, distance, speed, reached};
    double radius = progress == STOPPING ? capture_radius : stop_radius;
    if (stop_kept(p, before, goal_x, goal_y, radius, braking, turn_acceleration, path))
        return (Approach){bearing, distance, 0.0, STOPPING};
    return (Approach){bearing, distance, speed, reached};
}

/* step */

static bool usable(double value, double bound) { return -bound <= value && value <= bound; }

static bool sound(const double *memory, long rows)
{
    for (long i = HEAD; i < HEAD + 3 * rows; i += 3)
        if (!(0.0 <= memory[i] && memory[i] <= FAR && usable(memory[i + 1], FAST) && usable(memory[i + 2], FAST)))
            return false;
    bool posed = !(fabs(memory[X]) > FAR || fabs(memory[Y]) > FAR || fabs(memory[HEADING]) > FAR);
    bool motion = usable(memory[SPEED], FAST) && usable(memory[TURN_RATE], FAST);
    bool base = usable(memory[BASE_SPEED], FAST) && usable(memory[BASE_TURN_RATE], FAST);
    bool ages = memory[POSE_AGE] >= 0.0 && 0.0 <= memory[BASE_AGE] && memory[BASE_AGE] <= FAR;
    return posed && motion && base && ages && usable(memory[INTEGRAL], FAR);
}

static void fresh(double *out, long rows, double time, double v, double w, double period, double stale_after)
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
    for (long i = 0; i < rows; i++) {
        out[HEAD + 3 * i] = i * period;
        out[HEAD + 3 * i + 1] = v;
        out[HEAD + 3 * i + 2] = w;
    }
}

typedef struct { double since; bool good; } Clock;
typedef struct { Motion motion; double limit; int trouble; } Seen;
typedef struct { Motion motion; int trouble; } Before;
typedef struct { Pose pose; double age; bool local; int trouble; } Posed;
typedef struct { Point point; bool aimed, fresh; double moved; } Goal;

static Clock clock_of(double time, double last, double period, double stale_after)
{
    double since = time - last;
    bool good = usable(time, FAR) && 0.0 < since && since <= stale_after + period;
    return (Clock){good ? since : period, good};
}

static Seen seen_in(const double *measured)
{
    double v = measured[8], w = measured[9], speed_limit = measured[10];
    bool wrong = measured[14] != 0.0 || speed_limit < 0.0;
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
    double v = measured[12], w = measured[13];
    if (fabs(v) + fabs(w) * half_track <= BELIEVED * wheel)
        return (Before){{v, w}, APPLIED_BY_OTHERS};
    return (Before){{memory[SPEED], memory[TURN_RATE]}, v == v || w == w ? BAD_FIELD : 0};
}

static Posed pose_of(const double *memory, const double *measured, double since, double period, double stale_after)
{
    double time = measured[0], x = measured[1], y = measured[2], heading = measured[3], pose_time = measured[4];
    double age = pose_time != pose_time ? 0.0 : time - pose_time;
    bool posed = usable(x, FAR) && usable(y, FAR) && usable(heading, FAR);
    bool local = measured[7] == 1.0 && !posed;
    double known_age = memory[POSE_AGE] + since;
    if (!(-0.5 * period <= age && age <= FAR && (posed || local)))
        return (Posed){{memory[X], memory[Y], memory[HEADING]}, known_age, false, BAD_POSE};
    if (age > stale_after + 1e-9 && known_age < age && !local)
        return (Posed){{memory[X], memory[Y], memory[HEADING]}, known_age, false, STALE_POSE};
    if (local)
        return (Posed){{0.0, 0.0, 0.0}, most(age, 0.0), true, 0};
    return (Posed){{x, y, wrap(heading)}, most(age, 0.0), false, 0};
}

static bool jumped_to(const double *memory, const double *settings, Pose p, double span, double v, double w)
{
    double dx = p.x - memory[X];
    double dy = p.y - memory[Y];
    double far = most(most(settings[3], settings[4]), v) * span + SIGMAS * settings[11];
    double turned = difference(p.heading, memory[HEADING]);
    return dx * dx + dy * dy > far * far || fabs(turned) > most(settings[5], w) * span + SIGMAS * settings[12];
}

static Goal goal_of(const double *memory, const double *measured, Pose p, bool local, double radius)
{
    Point goal = {measured[5], measured[6]};
    double frame = measured[7];
    if (!(usable(goal.x, FAR) && usable(goal.y, FAR) && (frame == 0.0 || frame == 1.0)))
        return (Goal){{NAN, NAN}, false, false, NAN};
    if (frame == 1.0)
        goal = to_world(p, goal.x, goal.y);
    double moved = distance_to(memory[GOAL_X], memory[GOAL_Y], goal.x, goal.y);
    if (local && memory[GOAL_LOCAL] != 0.0)
        moved = 0.0;
    return (Goal){goal, true, !(moved <= radius), moved};
}

static double turning_on(double error, double w, double blur)
{
    if (fabs(error) > PI - least(blur, 0.5) && error * w < 0.0)
        return error - copysign(2.0 * PI, error);
    return error;
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

/* One step; `out` may be `memory` itself, and neither overlaps `measured` or `result`. */
void step_apart(const double *settings, const double *memory, long size, const double *measured, double *out, double *result)
{
    double period = settings[0], dead_time = settings[1], lag = settings[2], top = settings[3], reverse = settings[4];
    double turn = settings[5], wheel = settings[6], half_track = settings[7], acceleration = settings[8], braking = settings[9];
    double turn_acceleration = settings[10], capture_radius = settings[13], stay_radius = settings[14], stop_radius = settings[15];
    double aim_radius = settings[16], cruise = settings[17], ceiling = settings[18], gain = settings[19];
    double integral_time = settings[20], derivative_time = settings[21], predict = settings[22], stale_after = settings[23];
    double rest_radius = settings[24];
    long rows = (size - HEAD) / 3;
    double time = measured[0];
    if (!sound(memory, rows)) {
        fresh(out, rows, usable(time, FAR) ? time + period : NAN, 0.0, 0.0, period, stale_after);
        const double nothing[RESULT] = {0, 0, 0, 0, HELD, BAD_MEMORY, NAN, NAN, NAN, NAN, NAN, INFINITY, NAN, NAN, 0, 0};
        memcpy(result, nothing, sizeof nothing);
        return;
    }

    /* What is known: the time, the command before, the pose and its age, the motion at that time, the goal. */
    Clock clock = clock_of(time, memory[TIME], period, stale_after);
    double since = clock.since;
    Seen seen = seen_in(measured);
    Before before = before_of(memory, measured, wheel, half_track);
    Motion last = before.motion;
    Posed posed = pose_of(memory, measured, since, period, stale_after);
    double age = posed.age;
    int causes = seen.trouble | before.trouble | posed.trouble | (clock.good ? 0 : BAD_CLOCK);
    bool known = age <= stale_after + 1e-9;
    if (!known && age <= FAR)
        causes |= STALE_POSE;
    Commands under_way = {memory + HEAD, rows, since, last, dead_time, lag};
    Motion motion = motion_then(
        &under_way, -(memory[BASE_AGE] + since), -least(age, stale_after), memory[BASE_SPEED], memory[BASE_TURN_RATE]);
    if (seen.motion.v == seen.motion.v)
        motion.v = seen.motion.v;
    if (seen.motion.w == seen.motion.w)
        motion.w = seen.motion.w;
    bool jumped = false;
    if (posed.trouble == 0 && !posed.local && memory[POSE_AGE] <= FAR) {
        double span = fabs(memory[POSE_AGE] + since - age) + period;
        double fastest_v = most(fabs(motion.v), fabs(last.v)), fastest_w = most(fabs(motion.w), fabs(last.w));
        jumped = jumped_to(memory, settings, posed.pose, span, fastest_v, fastest_w);
    }
    Goal goal = goal_of(memory, measured, posed.pose, posed.local, capture_radius);
    if (jumped)
        causes |= POSE_JUMPED;
    if (!goal.aimed)
        causes |= BAD_GOAL;
    if (measured[11] != 0.0 && measured[11] == measured[11])
        causes |= TOLD_TO_HOLD;
    bool held = (causes & (TOLD_TO_HOLD | BAD_CLOCK | BAD_GOAL)) != 0 || !known;

    /* Now, and when the new command takes effect. */
    Moving now = {{NAN, NAN, NAN}, motion};
    double distance = NAN, error = NAN;
    bool rest = false;
    if (known) {
        now = carry(&under_way, -age, 0.0, posed.pose, motion);
        rest = fabs(now.motion.v) + fabs(now.motion.w) * half_track < REST;
        if (fabs(seen.motion.v) >= REST || fabs(seen.motion.w) * half_track >= REST)
            rest = false;
        if (goal.aimed)
            distance = distance_to(now.pose.x, now.pose.y, goal.point.x, goal.point.y);
    }
    bool stood = memory[STAYS] != 0.0 && !goal.fresh;
    bool same_place = goal.moved <= stay_radius - capture_radius;
    bool stays = stood && distance <= (same_place ? stay_radius : capture_radius);
    double integral = 0.0, heading_before = NAN, asked = 0.0, wanted_v = 0.0, wanted_w = 0.0, progress = 0.0;
    if (!held) {
        Moving then = carry(&under_way, 0.0, dead_time, now.pose, now.motion);
        Pose end = arc(then.pose, then.motion.v, then.motion.w, lag);
        Approach approach = constant_speed(
            end, last, goal.point.x, goal.point.y, same_place ? memory[PROGRESS] : 0.0, cruise, aim_radius, stop_radius,
            capture_radius, rest_radius, braking, turn_acceleration, period);
        wanted_v = approach.speed;
        progress = approach.progress;
        double bearing = approach.bearing, heading = end.heading;
        if (predict == 0.0) {
            heading = posed.pose.heading;
            bearing = bearing_to(posed.pose.x, posed.pose.y, goal.point.x, goal.point.y);
        }
        error = difference(bearing, heading);
        double turning_to = turning_on(error, last.w, 6.0 * (settings[12] + settings[11] / most(distance, capture_radius)));
        heading_before = heading;
        if (stays)
            wanted_v = 0.0;
        if (wanted_v != 0.0) {
            integral = goal.fresh || jumped ? 0.0 : memory[INTEGRAL];
            double rate = heading_rate(heading, jumped || posed.local ? NAN : memory[HEADING_BEFORE], since);
            asked = gain * (turning_to + integral / integral_time - derivative_time * rate);
            wanted_w = clip(asked, -ceiling, ceiling);
            if (fabs(asked) > ceiling)
                causes |= TURN_RATE_LIMIT;
        }
    }

    /* The command, within the limits. */
    top = least(top, seen.limit);
    if (posed.trouble != 0)
        top = least(top, most(last.v, 0.0));
    double share = least(since, period);
    Limited given = limit(
        last, wanted_v, wanted_w, top, reverse, turn, wheel, half_track, acceleration * share, braking * share,
        turn_acceleration * share);
    causes |= given.bound;
    if (wanted_v != 0.0 && integral_time < INFINITY)
        integral = clip(integrate(integral, error, asked, given.w, share), -FAR, FAR);
    int phase = DRIVING;
    if (held)
        phase = HELD;
    else if (given.v == 0.0 && given.w == 0.0 && rest && (stays || distance <= rest_radius))
        phase = ARRIVED;

    /* The new memory; out may be memory, so each place is read before it is written. */
    remember(memory, out, &under_way, stale_after, given.v, given.w);
    out[TIME] = usable(time, FAR) ? time : memory[TIME] + period;
    out[X] = posed.local ? NAN : posed.pose.x;
    out[Y] = posed.local ? NAN : posed.pose.y;
    out[HEADING] = posed.local ? NAN : posed.pose.heading;
    out[POSE_AGE] = posed.local ? INFINITY : age;
    stays = phase == ARRIVED || (held ? stood : stays);
    bool aims = goal.aimed && !(stays && stood);
    out[GOAL_X] = aims ? (posed.local ? NAN : goal.point.x) : memory[GOAL_X];
    out[GOAL_Y] = aims ? (posed.local ? NAN : goal.point.y) : memory[GOAL_Y];
    out[GOAL_LOCAL] = aims ? (posed.local ? 1.0 : 0.0) : memory[GOAL_LOCAL];
    out[INTEGRAL] = integral;
    out[HEADING_BEFORE] = heading_before;
    out[PROGRESS] = progress;
    out[PHASE] = phase;
    out[STAYS] = stays ? 1.0 : 0.0;

    double half = 0.5 * given.w * (2.0 * half_track);
    const double all[RESULT] = {
        given.v - half, given.v + half, given.v, given.w, phase, causes, error, distance,
        now.pose.x, now.pose.y, now.pose.heading, age, goal.point.x, goal.point.y, wanted_v, wanted_w};
    memcpy(result, all, sizeof all);
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
