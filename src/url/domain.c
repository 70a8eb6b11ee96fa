#include "url/domain.h"

#include <arpa/inet.h>
#include <libpsl.h>
#include <pthread.h>
#include <stdio.h>

const char *windrow_domain(const char *host)
{
    struct in_addr address;
    if (host[0] == '[' || inet_pton(AF_INET, host, &address) == 1)
        return host;
    const char *domain = psl_registrable_domain(psl_builtin(), host);
    return domain != NULL ? domain : host;
}

bool windrow_domain_top_level(const char *label)
{
    return psl_is_public_suffix2(psl_builtin(), label, PSL_TYPE_ICANN | PSL_TYPE_NO_STAR_RULE);
}

static char version[160];

static void version_write(void)
{
    snprintf(version, sizeof version, "libpsl %s, list %s", psl_get_version(),
             psl_builtin_sha1sum());
}

const char *windrow_domain_version(void)
{
    static pthread_once_t once = PTHREAD_ONCE_INIT;
    pthread_once(&once, version_write);
    return version;
}
