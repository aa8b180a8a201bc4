/* The protocol's words as text; see names.h. */
#include "names.h"

static const RR_FLASH char *after(const RR_FLASH char *name)
{
    while (*name++ != '\0') {
    }
    return name;
}

const RR_FLASH char *rr_names_at(const RR_FLASH char *names, uint8_t place)
{
    while (place-- != 0) {
        names = after(names);
    }
    return names;
}

uint8_t rr_names_find(const RR_FLASH char *names, const char *text, uint8_t length)
{
    for (uint8_t place = 0; *names != '\0'; place++) {
        uint8_t same = 0;
        while (same != length && names[same] == text[same]) {
            same++;
        }
        if (same == length && names[same] == '\0') {
            return place;
        }
        names = after(names);
    }
    return RR_NAME_UNKNOWN;
}
