/* Blocks of work over plain threads that are joined before the call returns: nothing survives into a fork. */
#define _GNU_SOURCE
#include "../limen.h"

#include <pthread.h>
#include <stdatomic.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

#if defined(__linux__)
#include <sched.h>
#endif

enum { MOST_THREADS = 256 };

typedef struct {
    lm_work *work;
    lm_stop *stop;
    void *context;
    size_t blocks;
    atomic_size_t next;
    atomic_bool stopped;
} crew;

static void *work_on(void *argument)
{
    crew *c = argument;
    for (;;) {
        size_t block = atomic_fetch_add(&c->next, 1);
        if (block >= c->blocks || atomic_load(&c->stopped))
            return NULL;
        c->work(c->context, block);
    }
}

lm_status lm_run_blocks(size_t blocks, unsigned threads, lm_work *work, lm_stop *stop, void *context)
{
    crew c = {.work = work, .stop = stop, .context = context, .blocks = blocks};
    pthread_t helper[MOST_THREADS];
    unsigned helpers = 0;
    while (helpers + 1 < threads && helpers + 1 < blocks && helpers < MOST_THREADS &&
           pthread_create(&helper[helpers], NULL, work_on, &c) == 0)
        helpers++; /* a thread that cannot be had is done without */
    while (!atomic_load(&c.stopped)) {
        if (stop != NULL && stop(context))
            atomic_store(&c.stopped, true);
        size_t block = atomic_fetch_add(&c.next, 1);
        if (block >= blocks || atomic_load(&c.stopped))
            break;
        work(context, block);
    }
    for (unsigned h = 0; h < helpers; h++)
        pthread_join(helper[h], NULL);
    return atomic_load(&c.stopped) ? LM_CALLBACK : LM_OK;
}

#if defined(__linux__)
/* Processors that a quota of the control group grants, rounded up; 0 when there is no quota. */
static unsigned quota_in(const char *directory, const char *file, const char *period_file)
{
    char path[4400], text[64] = "";
    double quota = -1, period = 100000;
    snprintf(path, sizeof path, "%s/%s", directory, file);
    FILE *stream = fopen(path, "re");
    if (stream == NULL)
        return 0;
    int got = fscanf(stream, "%63s %lf", text, &period);
    fclose(stream);
    if (got < 1 || sscanf(text, "%lf", &quota) != 1) /* "max" */
        return 0;
    if (period_file != NULL) {
        snprintf(path, sizeof path, "%s/%s", directory, period_file);
        stream = fopen(path, "re");
        if (stream == NULL)
            return 0;
        got = fscanf(stream, "%lf", &period);
        fclose(stream);
    }
    if (got < 1 || !(quota > 0) || !(period > 0) || quota / period >= MOST_THREADS)
        return 0;
    unsigned whole = (unsigned)(quota / period);
    return whole + (whole < quota / period);
}

/* The smallest quota between the group of this process and the root of the hierarchy, version 2 or 1. */
static unsigned quota_of_group(void)
{
    unsigned least = 0;
    char line[4200];
    FILE *groups = fopen("/proc/self/cgroup", "re");
    while (groups != NULL && fgets(line, sizeof line, groups) != NULL) {
        line[strcspn(line, "\n")] = '\0';
        char *controllers = strchr(line, ':');
        char *group = controllers != NULL ? strchr(controllers + 1, ':') : NULL;
        if (group == NULL)
            continue;
        *group++ = '\0';
        bool second = controllers[1] == '\0';
        if (!second && strstr(controllers, "cpu") == NULL)
            continue;
        for (;;) {
            char directory[4300];
            snprintf(directory, sizeof directory, "%s%s", second ? "/sys/fs/cgroup" : "/sys/fs/cgroup/cpu",
                     strcmp(group, "/") == 0 ? "" : group);
            unsigned quota = second ? quota_in(directory, "cpu.max", NULL)
                                    : quota_in(directory, "cpu.cfs_quota_us", "cpu.cfs_period_us");
            if (quota > 0 && (least == 0 || quota < least))
                least = quota;
            char *cut = strrchr(group, '/');
            if (cut == NULL || strcmp(group, "/") == 0 || *group == '\0')
                break;
            *(cut == group ? cut + 1 : cut) = '\0';
        }
    }
    if (groups != NULL)
        fclose(groups);
    return least;
}
#endif

unsigned lm_threads_available(void)
{
    long count = sysconf(_SC_NPROCESSORS_ONLN);
#if defined(__linux__)
    cpu_set_t set;
    if (sched_getaffinity(0, sizeof set, &set) == 0)
        count = CPU_COUNT(&set);
    unsigned quota = quota_of_group();
    if (quota > 0 && (long)quota < count)
        count = quota;
#endif
    return count < 1 ? 1 : count > MOST_THREADS ? MOST_THREADS : (unsigned)count;
}
