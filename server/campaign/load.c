/*
 * Loading a batch. The calling thread walks the paths and gathers files into a group; the pool
 * reads and prepares the group's files side by side; while the store takes it, the next group is
 * gathered and prepared. Two groups at most are in memory, so memory stays flat.
 */
#include <assert.h>
#include <math.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "ebbmark/clock.h"
#include "ebbmark/text.h"
#include "load.h"

#define GROUP_FILES 64
#define GROUP_BYTES (16u << 20) /* a larger file makes a group of its own, without a copy */
#define SOURCE_MAX 500          /* bytes of the paths that are kept with a batch */
#define PROGRESS_S 0.2

struct group {
    struct load_file files[GROUP_FILES];
    struct store_file_new stored[GROUP_FILES];
    size_t count, bytes;
};

/* A curve of a file, to be prepared. */
struct task {
    struct load_file *file;
    size_t curve;
};

struct load {
    struct campaign *campaign;
    const struct campaign_load_options *options;
    struct load_recipe recipe;
    struct lightcurve_catalogue catalogue;
    struct campaign_load_progress progress;
    double began_s, told_s;
    bool cancelled, failed; /* failed: `error` says why */
    struct base_error error;
    struct group *filling; /* by the walk */
    struct group *storing; /* with the store, where `under_way` */
    bool under_way;
    /* From here on: shared with the thread that stores, by the lock. */
    pthread_mutex_t lock;
    pthread_cond_t stored;
    bool done, ok;
    struct base_error store_error;
};

static bool fail(struct load *load, const struct base_error *error)
{
    load->failed = true;
    load->error = *error;
    return false;
}

/* ---- progress ---- */

static void reckon(struct load *load)
{
    struct campaign_load_progress *p = &load->progress;
    p->seconds = base_clock_monotonic_s() - load->began_s;
    p->points_per_second = p->seconds > 0.0 && p->points > 0 ? (double)p->points / p->seconds : NAN;
    p->seconds_left =
        p->files_done > 0 && p->files_total >= p->files_done
            ? p->seconds * (double)(p->files_total - p->files_done) / (double)p->files_done
            : NAN;
}

/* Tell how far it is; now, or when the last time is some while ago. False: cancelled. */
static bool tell(struct load *load, bool now)
{
    double time = base_clock_monotonic_s();
    if (load->options->progress == NULL || (!now && time - load->told_s < PROGRESS_S))
        return true;
    load->told_s = time;
    reckon(load);
    load->cancelled = !load->options->progress(load->options->context, &load->progress);
    return !load->cancelled;
}

/* Count a file that has its outcome on the disk. */
static void count_file(struct load *load, const struct load_file *file)
{
    struct campaign_load_progress *p = &load->progress;
    p->files_done++;
    p->bytes_done += file->size;
    p->files_total = p->files_total > p->files_done ? p->files_total : p->files_done;
    p->bytes_total = p->bytes_total > p->bytes_done ? p->bytes_total : p->bytes_done;
    p->files_loaded += file->outcome == STORE_FILE_LOADED ? 1 : 0;
    p->files_repeated += file->outcome == STORE_FILE_REPEATED ? 1 : 0;
    p->files_refused += file->outcome == STORE_FILE_REFUSED ? 1 : 0;
    p->stars += file->ready_count;
    p->stars_left_out += file->stars_left_out;
    for (size_t i = 0; i < file->ready_count; i++)
        p->points += file->ready[i].points.count;
    if ((file->outcome == STORE_FILE_REFUSED || file->stars_left_out > 0) &&
        load->options->refused != NULL)
        load->options->refused(load->options->context, file->label, file->reason);
}

/* ---- a group ---- */

static void group_empty(struct group *group)
{
    for (size_t i = 0; i < group->count; i++)
        load_file_free(&group->files[i]);
    group->count = group->bytes = 0;
}

static void read_one(void *context, size_t i)
{
    struct load *load = context;
    load_file_read(&load->filling->files[i], &load->recipe);
}

struct tasks {
    const struct load *load;
    struct task *list;
    size_t count;
};

static void prepare_one(void *context, size_t i)
{
    const struct tasks *tasks = context;
    load_file_prepare(tasks->list[i].file, tasks->list[i].curve, &tasks->load->recipe);
}

static bool same_bytes(const struct load_file *a, const struct load_file *b)
{
    return memcmp(a->sha256, b->sha256, sizeof a->sha256) == 0;
}

/* The same bytes twice in this group, or in the one that the store is just taking. Whether a twin
 * in the group can be loaded shows later. */
static void find_twins(const struct load *load)
{
    for (size_t i = 0; i < load->filling->count; i++) {
        struct load_file *file = &load->filling->files[i];
        bool twin = false;
        if (file->outcome != STORE_FILE_UNKNOWN)
            continue;
        for (size_t k = 0; k < i && file->twin == NULL; k++) {
            const struct load_file *other = &load->filling->files[k];
            if (other->outcome == STORE_FILE_UNKNOWN && same_bytes(other, file))
                file->twin = other;
        }
        for (size_t k = 0; load->under_way && k < load->storing->count; k++)
            twin = twin || (load->storing->files[k].outcome == STORE_FILE_LOADED &&
                            same_bytes(&load->storing->files[k], file));
        if (twin || file->twin != NULL) {
            file->outcome = STORE_FILE_REPEATED;
            (void)snprintf(file->reason, sizeof file->reason,
                           "These bytes are in this batch already.");
        }
    }
}

/* Clean, cut, trend and noise of every curve of the group. */
static bool prepare_group(struct load *load, struct base_error *error)
{
    struct group *group = load->filling;
    struct tasks tasks = {.load = load};
    for (size_t i = 0; i < group->count; i++)
        if (group->files[i].outcome == STORE_FILE_UNKNOWN)
            tasks.count += group->files[i].reading.count;
    tasks.list = calloc(tasks.count > 0 ? tasks.count : 1, sizeof *tasks.list);
    if (tasks.list == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to load the files.");
    size_t at = 0;
    for (size_t i = 0; i < group->count; i++)
        for (size_t k = 0;
             group->files[i].outcome == STORE_FILE_UNKNOWN && k < group->files[i].reading.count;
             k++)
            tasks.list[at++] = (struct task){&group->files[i], k};
    base_pool_for(load->campaign->pool, tasks.count, prepare_one, &tasks);
    free(tasks.list);
    return true;
}

/* From bytes to what the store takes. */
static bool work_on_group(struct load *load, struct base_error *error)
{
    struct group *group = load->filling;
    base_pool_for(load->campaign->pool, group->count, read_one, load);
    for (size_t i = 0; i < group->count; i++)
        if (group->files[i].failed) {
            *error = group->files[i].error;
            return false;
        }
    find_twins(load);
    bool ok = prepare_group(load, error);
    for (size_t i = 0; ok && i < group->count; i++)
        ok = load_file_finish(&group->files[i], &load->recipe, &group->stored[i], error);
    return ok;
}

/* ---- storing ---- */

static void store_group(void *context)
{
    struct load *load = context;
    struct base_error error = {0};
    bool ok =
        store_files_add(load->campaign->store, load->storing->stored, load->storing->count, &error);
    (void)pthread_mutex_lock(&load->lock);
    load->ok = ok;
    load->store_error = error;
    load->done = true;
    (void)pthread_cond_signal(&load->stored);
    (void)pthread_mutex_unlock(&load->lock);
}

/* Wait for the group that the store is taking, count its files, and empty it. */
static bool settle_group(struct load *load)
{
    if (!load->under_way)
        return true;
    (void)pthread_mutex_lock(&load->lock);
    while (!load->done)
        (void)pthread_cond_wait(&load->stored, &load->lock);
    (void)pthread_mutex_unlock(&load->lock);
    load->under_way = false;
    for (size_t i = 0; load->ok && i < load->storing->count; i++)
        count_file(load, &load->storing->files[i]);
    group_empty(load->storing);
    return load->ok || fail(load, &load->store_error);
}

/* Work on the group that was filled and hand it to the store. */
static bool flush(struct load *load)
{
    struct base_error error = {0};
    if (load->filling->count == 0)
        return true;
    if (!work_on_group(load, &error))
        return fail(load, &error);
    if (!settle_group(load) || !tell(load, true))
        return false;
    struct group *full = load->filling;
    load->filling = load->storing;
    load->storing = full;
    load->under_way = true;
    load->done = false;
    if (load->campaign->pool == NULL ||
        !base_pool_submit(load->campaign->pool, store_group, load, NULL))
        store_group(load);
    return true;
}

static bool visit(void *context, const char *label, const void *data, size_t size,
                  const struct base_error *reason)
{
    struct load *load = context;
    struct base_error error = {0};
    bool alone = size > GROUP_BYTES;
    if (!tell(load, false))
        return false;
    if ((alone || load->filling->count == GROUP_FILES ||
         load->filling->bytes + size > GROUP_BYTES) &&
        !flush(load))
        return false;
    struct load_file *file = &load->filling->files[load->filling->count];
    if (!load_file_open(file, label, data, size, alone, reason)) {
        load_file_free(file);
        (void)base_fail(&error, BASE_MEMORY, "There is no memory to load %s.", label);
        return fail(load, &error);
    }
    load->filling->count++;
    load->filling->bytes += size;
    return !alone || flush(load);
}

/* ---- the whole ---- */

static bool walk_paths(struct load *load, struct base_error *error)
{
    const struct campaign_load_options *options = load->options;
    struct base_error problem = {0};
    bool ok = true;
    for (size_t i = 0; ok && i < options->path_count; i++)
        ok = lightcurve_walk(options->paths[i], visit, load, &problem);
    ok = ok && flush(load);
    ok = settle_group(load) && ok;
    if (!ok && load->failed)
        problem = load->error;
    else if (!ok && load->cancelled)
        (void)base_fail(&problem, BASE_CANCELLED, "The load was stopped.");
    if (!ok && error != NULL)
        *error = problem;
    return ok;
}

/* How much there is to do; also finds a path that is not there before anything is begun. */
static bool count_paths(struct load *load, struct base_error *error)
{
    bool ok = true;
    for (size_t i = 0; ok && i < load->options->path_count; i++) {
        size_t files = 0;
        uint64_t bytes = 0;
        ok = lightcurve_walk_count(load->options->paths[i], &files, &bytes, error);
        load->progress.files_total += files;
        load->progress.bytes_total += bytes;
    }
    return ok;
}

/* The paths as they are kept with the batch, cut where they get long. */
static void name_source(const struct campaign_load_options *options, char source[SOURCE_MAX])
{
    size_t length = 0;
    source[0] = '\0';
    for (size_t i = 0; i < options->path_count; i++) {
        int added = snprintf(source + length, SOURCE_MAX - length, "%s%s", i > 0 ? "; " : "",
                             options->paths[i]);
        if (added < 0 || (size_t)added >= SOURCE_MAX - length)
            break;
        length += (size_t)added;
    }
    /* A cut character, and paths that are no UTF-8, leave bytes that the store would not take. */
    for (char *c = source; *c != '\0' && !base_text_is_utf8(source, strlen(source)); c++)
        if ((unsigned char)*c >= 0x80)
            *c = '?';
}

/* Once all is stored: a batch with something in it is handed out from now on. */
static bool finish(struct load *load, struct base_error *error)
{
    if (load->progress.files_loaded + load->progress.files_repeated == 0)
        return true;
    return store_batch_finish(load->campaign->store, load->recipe.batch, base_clock_unix_ms(),
                              error) &&
           handout_refresh(load->campaign->handout, error);
}

static void load_open(struct load *load, struct campaign *campaign,
                      const struct campaign_load_options *options)
{
    const struct campaign_settings settings = campaign_settings_now(campaign);
    *load = (struct load){.campaign = campaign, .options = options};
    load->recipe = (struct load_recipe){.store = campaign->store,
                                        .mapping = &options->mapping,
                                        .catalogue = &load->catalogue,
                                        .quality_mask = (uint32_t)settings.quality_mask,
                                        .trend_window_d = settings.trend_window_days,
                                        .cut = LIGHTCURVE_CUT_DEFAULT};
    load->recipe.cut.length_d = settings.segment_days;
    load->recipe.cut.overlap_d = settings.overlap_days;
    load->began_s = load->told_s = base_clock_monotonic_s();
    load->progress.points_per_second = load->progress.seconds_left = NAN;
    (void)pthread_mutex_init(&load->lock, NULL);
    (void)pthread_cond_init(&load->stored, NULL);
}

static void load_close(struct load *load)
{
    if (load->filling != NULL)
        group_empty(load->filling);
    free(load->filling);
    free(load->storing);
    lightcurve_catalogue_free(&load->catalogue);
    (void)pthread_cond_destroy(&load->stored);
    (void)pthread_mutex_destroy(&load->lock);
}

static bool load_whole(struct load *load, struct base_error *error)
{
    const struct campaign_load_options *options = load->options;
    char source[SOURCE_MAX];
    bool resumed = false;
    load->filling = calloc(1, sizeof *load->filling);
    load->storing = calloc(1, sizeof *load->storing);
    if (load->filling == NULL || load->storing == NULL)
        return base_fail(error, BASE_MEMORY, "There is no memory to load a batch.");
    name_source(options, source);
    return count_paths(load, error) &&
           (options->catalogue == NULL ||
            lightcurve_catalogue_read(options->catalogue, &load->catalogue, error)) &&
           store_batch_begin(load->campaign->store, options->batch, source, base_clock_unix_ms(),
                             &load->recipe.batch, &resumed, error) &&
           walk_paths(load, error) && finish(load, error);
}

bool campaign_load(struct campaign *campaign, const struct campaign_load_options *options,
                   struct campaign_load_progress *result, struct base_error *error)
{
    assert(options->batch != NULL && options->paths != NULL);
    struct load load;
    load_open(&load, campaign, options);
    bool ok;
    if (pthread_mutex_trylock(&campaign->loading) == 0) {
        ok = load_whole(&load, error);
        (void)pthread_mutex_unlock(&campaign->loading);
    } else {
        ok = base_fail(error, BASE_BUSY, "Another batch is being loaded; wait until it is done.");
    }
    reckon(&load);
    if (ok)
        (void)tell(&load, true);
    *result = load.progress;
    load_close(&load);
    return ok;
}

bool campaign_batch_withdraw(struct campaign *campaign, int64_t batch, struct base_error *error)
{
    return store_batch_withdraw(campaign->store, batch, base_clock_unix_ms(), error) &&
           handout_refresh(campaign->handout, error);
}
