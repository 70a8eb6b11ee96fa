#include "store/inlinks.h"

void windrow_inlinks_begin(struct windrow_inlinks *inlinks, const struct windrow_store *store, enum windrow_block_kind kind, uint64_t first_block)
{
    *inlinks = (struct windrow_inlinks){.store = store, .kind = kind, .next_block = first_block};
}

enum windrow_status windrow_inlinks_next(struct windrow_inlinks *inlinks)
{
    if (!inlinks->record || inlinks->position == inlinks->record->target_count) {
        if (inlinks->next_block == windrow_store_block_count(inlinks->store, inlinks->kind)) {
            inlinks->ended = true;
            return WINDROW_OK;
        }
        struct windrow_block block;
        inlinks->record = windrow_store_block_record(inlinks->store, inlinks->kind, inlinks->next_block);
        enum windrow_status status = windrow_store_block_read(inlinks->store, inlinks->kind, inlinks->next_block, &inlinks->reader, &block);
        if (!status)
            status = windrow_block_lists(&block, inlinks->record, windrow_store_facts(inlinks->store)->core_pages, &inlinks->lists);
        if (status) {
            inlinks->record = NULL;
            return status;
        }
        inlinks->next_block++;
        inlinks->position = 0;
        inlinks->source_at = 0;
    }
    inlinks->target = inlinks->record->first_target + inlinks->position;
    inlinks->sources = (const uint64_t *)inlinks->lists.sources.data + inlinks->source_at;
    inlinks->count = ((const uint32_t *)inlinks->lists.counts.data)[inlinks->position++];
    inlinks->source_at += inlinks->count;
    inlinks->more = (inlinks->record->flags & WINDROW_BLOCK_PIECE) && !(inlinks->record->flags & WINDROW_BLOCK_LAST_PIECE);
    return WINDROW_OK;
}

void windrow_inlinks_end(struct windrow_inlinks *inlinks)
{
    windrow_block_reader_free(&inlinks->reader);
    windrow_lists_free(&inlinks->lists);
    *inlinks = (struct windrow_inlinks){0};
}
