// Files for the program. See program_files.h.

#undef _XOPEN_SOURCE
#define _XOPEN_SOURCE 700

#include "program_files.h"

#include <errno.h>
#include <fcntl.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#define LARGEST (64 << 20)
#define EXIT_CANNOT_CREATE 73
#define EXIT_IO 74

static void reason(char *why, size_t size, const char *path, const char *text)
{
    snprintf(why, size, "%s: %s", path, text);
}

static char *read_all(FILE *file, size_t *n_bytes)
{
    size_t room = 1 << 16, used = 0;
    char *bytes = malloc(room);
    while (bytes != NULL) {
        used += fread(bytes + used, 1, room - used - 1, file);
        if (used < room - 1 || used > LARGEST)
            break;
        char *grown = realloc(bytes, room *= 2);
        if (grown == NULL) {
            free(bytes);
            return NULL;
        }
        bytes = grown;
    }
    if (bytes != NULL)
        bytes[used] = 0;
    *n_bytes = used;
    return bytes;
}

char *lw__program_read(const char *path, size_t *n_bytes, int *missing, char *why, size_t size)
{
    struct stat about;
    *missing = 0;
    if (stat(path, &about) != 0) {
        *missing = errno == ENOENT || errno == ENOTDIR;
        reason(why, size, path, *missing ? "no such file" : strerror(errno));
        return NULL;
    }
    if (!S_ISREG(about.st_mode)) {
        reason(why, size, path,
               S_ISDIR(about.st_mode) ? "is a folder; a file is wanted" : "is no regular file");
        return NULL;
    }
    FILE *file = fopen(path, "rb");
    if (file == NULL) {
        reason(why, size, path, strerror(errno));
        return NULL;
    }
    char *bytes = read_all(file, n_bytes);
    int failed = ferror(file) || bytes == NULL || *n_bytes > LARGEST;
    fclose(file);
    if (failed) {
        reason(why, size, path, "cannot be read, or is larger than 64 MiB");
        free(bytes);
        return NULL;
    }
    return bytes;
}

static int write_and_flush(int fd, const char *text, size_t n_bytes)
{
    while (n_bytes > 0) {
        ssize_t done = write(fd, text, n_bytes);
        if (done < 0 && errno == EINTR)
            continue;
        if (done <= 0)
            return -1;
        text += done;
        n_bytes -= (size_t)done;
    }
    return fsync(fd);
}

static int write_renamed(const char *partial, const char *final, const char *text, size_t n_bytes)
{
    int fd = open(partial, O_WRONLY | O_CREAT | O_TRUNC | O_CLOEXEC, 0666);
    if (fd < 0)
        return EXIT_CANNOT_CREATE;
    int failed = write_and_flush(fd, text, n_bytes) != 0;
    int why = errno;
    if (close(fd) != 0 && !failed) {
        failed = 1;
        why = errno;
    }
    if (!failed && rename(partial, final) == 0)
        return 0;
    why = failed ? why : errno;
    unlink(partial);
    errno = why;
    return failed ? EXIT_IO : EXIT_CANNOT_CREATE;
}

int lw__program_write(const char *folder, const char *file, const char *text, size_t n_bytes,
                      char *why, size_t size)
{
    size_t room = strlen(folder) + strlen(file) + 40;
    char *final = malloc(room), *partial = malloc(room);
    int status = EXIT_IO;
    if (final != NULL && partial != NULL) {
        sigset_t ending, before;
        sigemptyset(&ending);
        sigaddset(&ending, SIGINT);
        sigaddset(&ending, SIGTERM);
        sigaddset(&ending, SIGHUP);
        sigprocmask(SIG_BLOCK, &ending, &before);
        snprintf(final, room, "%s/%s", folder, file);
        snprintf(partial, room, "%s/.%ld.partial", folder, (long)getpid());
        status = write_renamed(partial, final, text, n_bytes);
        if (status != 0)
            reason(why, size, final, strerror(errno));
        sigprocmask(SIG_SETMASK, &before, NULL);
    } else {
        reason(why, size, file, "no memory");
    }
    free(final);
    free(partial);
    return status;
}

int lw__program_make_folder(const char *path, char *why, size_t size)
{
    struct stat about;
    char *part = strdup(path);
    if (part == NULL)
        return -1;
    for (char *c = part + 1; *part != 0; c++) {
        if (*c != '/' && *c != 0)
            continue;
        char kept = *c;
        *c = 0;
        mkdir(part, 0777); // whether it worked shows below
        *c = kept;
        if (kept == 0)
            break;
    }
    free(part);
    if (stat(path, &about) == 0 && S_ISDIR(about.st_mode))
        return 0;
    reason(why, size, path, "the folder cannot be made");
    return -1;
}

char *lw__program_inside(const char *folder, const char *name, char *why, size_t size)
{
    size_t room = strlen(folder) + strlen(name) + 2;
    char *joined = malloc(room), *root = realpath(folder, NULL), *full = NULL;
    if (joined != NULL && root != NULL && name[0] != '/') {
        snprintf(joined, room, "%s/%s", folder, name);
        full = realpath(joined, NULL);
    }
    size_t length = root != NULL ? strlen(root) : 0;
    if (length == 1)
        length = 0; // the root of the file system holds everything
    if (name[0] == '/')
        reason(why, size, name, "files of a study are named relative to its folder");
    else if (full == NULL)
        reason(why, size, name, "no such file in the study's folder");
    else if (strncmp(full, root, length) != 0 || full[length] != '/') {
        reason(why, size, name, "lies outside the study's folder");
        free(full);
        full = NULL;
    }
    free(joined);
    free(root);
    return full;
}

char *lw__program_folder_of(const char *path)
{
    const char *slash = strrchr(path, '/');
    if (slash == NULL)
        return strdup(".");
    return strndup(path, slash == path ? 1 : (size_t)(slash - path));
}
