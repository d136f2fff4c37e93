#include "fellwalk.h"

const char *fw_sentence(int status)
{
    switch (status) {
#define FW_STATUS_CASE(name, code, sentence)                                                                           \
    case code:                                                                                                         \
        return sentence;
        FW_STATUS_LIST(FW_STATUS_CASE)
#undef FW_STATUS_CASE
    default:
        return "unknown status";
    }
}
